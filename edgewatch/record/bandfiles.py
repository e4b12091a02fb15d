"""Band files: one a grade in a folder, by habit ``GRADE.toml``; read all at once, written atomically."""

from __future__ import annotations

import contextlib
import os
from collections.abc import Callable
from pathlib import Path

from edgewatch.errors import DeviceError, SettingsError
from edgewatch.judge.bands import Band, band_toml, read_band
from edgewatch.record.tomlfile import read_toml


def load_band(path: Path) -> Band:
    """Read one band file. Raises ``SettingsError`` naming file, key, value and what is allowed."""
    return read_band(read_toml(path), file=str(path))


def load_bands(folder: Path, *, on_problem: Callable[[str], None] | None = None) -> dict[str, Band]:
    """Read every band file of ``folder`` in name order; a folder that is not there holds none.

    A file that cannot be used raises ``SettingsError`` with every problem found, or, with ``on_problem``, is told and
    left out: a running station goes on with the bands that are good.
    """
    bands: dict[str, Band] = {}
    problems: list[str] = []
    for path in sorted(folder.glob("*.toml")) if folder.is_dir() else []:
        band = _tried(path, problems)
        if band is not None and band.grade in bands:
            problems.append(f"{path}: grade = {band.grade!r}: another file in {folder} holds this grade too")
        elif band is not None:
            bands[band.grade] = band
    if problems and on_problem is None:
        raise SettingsError(*problems)
    for problem in problems:
        assert on_problem is not None
        on_problem(problem)
    return bands


def _tried(path: Path, problems: list[str]) -> Band | None:
    try:
        return load_band(path)
    except SettingsError as error:
        problems.extend(error.problems)
        return None


def save_band(path: Path, band: Band) -> None:
    """Write a band so that the file is always whole: the old one or the new one. Raises ``DeviceError``."""
    spare = path.with_name(f".{path.name}.new")
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        with spare.open("w", encoding="utf-8") as file:
            file.write(band_toml(band))
            file.flush()
            os.fsync(file.fileno())
        spare.replace(path)
    except OSError as error:
        with contextlib.suppress(OSError):
            spare.unlink(missing_ok=True)
        raise DeviceError(f"{path}: cannot be written: {error.strerror or error}") from error
