"""Evidence: pictures of nonconforming bars in a folder with a size limit."""

from __future__ import annotations

import contextlib
import os
import re
import threading
from pathlib import Path

from edgewatch.errors import DeviceError

_OURS = re.compile(r"bar-\d{6,}-[A-Za-z0-9_-]{1,64}\.(?:jpg|png)")
_NAME = re.compile(r"[A-Za-z0-9_-]{1,64}")
_ENDINGS = {b"\xff\xd8\xff": ".jpg", b"\x89PNG\r\n\x1a\n": ".png"}
"""How a JPEG (SOI and the next marker) and a PNG begin."""


class EvidenceStore:
    """Pictures named ``bar-NUMBER-NAME.jpg`` or ``.png``; the oldest give way above ``most_mb``.

    A picture is there whole or not at all, after a power cut too (written aside, synced, renamed). Only files named
    like this are counted and removed. Used by any number of threads of one process. Raises ``DeviceError`` when the
    folder cannot be made or read.
    """

    def __init__(self, folder: Path, most_mb: float) -> None:
        self.folder = folder
        self._most_bytes = most_mb * 1e6
        self._lock = threading.Lock()
        try:
            folder.mkdir(parents=True, exist_ok=True)
            found = []
            for path in folder.iterdir():
                if path.name.endswith(".part") and _OURS.fullmatch(path.name[: -len(".part")]):
                    path.unlink(missing_ok=True)  # left by a power cut
                elif _OURS.fullmatch(path.name) and path.is_file():
                    stat = path.stat()
                    found.append((stat.st_mtime_ns, path.name, stat.st_size))
        except OSError as error:
            raise DeviceError(f"evidence {folder}: {error.strerror or error}") from error
        self._sizes = {name: size for _, name, size in sorted(found)}
        self._total = sum(self._sizes.values())

    @property
    def total_bytes(self) -> int:
        """Size of the pictures kept."""
        return self._total

    def keep(self, bar: int, name: str, picture: bytes) -> Path:
        """Keep a JPEG or PNG of ``bar`` under ``name``, replacing one of the same name, and return its path.

        Raises ``ValueError`` (not such a picture or name) and ``DeviceError`` (disk full); nothing is kept then.
        """
        ending = next((ending for magic, ending in _ENDINGS.items() if picture.startswith(magic)), None)
        if ending is None:
            raise ValueError("a JPEG or PNG picture is needed")
        if not _NAME.fullmatch(name) or bar < 0:
            raise ValueError(f"bar = {bar}, name = {name!r}: a number and letters, digits, minus, underline are needed")
        path = self.folder / f"bar-{bar:06d}-{name}{ending}"
        with self._lock:
            self._make_room(len(picture), path.name)
            try:
                _write_whole(path, picture)
            except OSError as error:
                raise DeviceError(f"evidence {path}: {error.strerror or error}; free some space") from error
            self._total += len(picture) - self._sizes.pop(path.name, 0)
            self._sizes[path.name] = len(picture)
        return path

    def _make_room(self, size: int, keep: str) -> None:
        """Remove the oldest until ``size`` more fits; one picture larger than the limit is kept alone."""
        for name in list(self._sizes):
            if self._total + size - self._sizes.get(keep, 0) <= self._most_bytes:
                return
            if name == keep:
                continue
            try:
                (self.folder / name).unlink(missing_ok=True)
            except OSError as error:
                raise DeviceError(f"evidence {self.folder / name}: {error.strerror or error}") from error
            self._total -= self._sizes.pop(name)


def _write_whole(path: Path, data: bytes) -> None:
    part = path.with_name(f"{path.name}.part")
    try:
        with part.open("wb") as file:
            file.write(data)
            file.flush()
            os.fsync(file.fileno())
        part.replace(path)
    except OSError:
        with contextlib.suppress(OSError):
            part.unlink(missing_ok=True)
        raise
