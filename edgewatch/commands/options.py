"""Options that several commands share, and how they override the station file."""

from __future__ import annotations

import argparse
import dataclasses
from pathlib import Path
from typing import Any

from edgewatch.errors import SettingsError
from edgewatch.record.tomlfile import read_toml
from edgewatch.settings import Settings, read_settings

DEFAULT_STATION = "station.toml"


def add_station(parser: argparse.ArgumentParser) -> None:
    """``--station FILE``."""
    parser.add_argument(
        "--station", metavar="FILE", help=f"configuration of the station (default: {DEFAULT_STATION}, where it exists)"
    )


def add_optics(parser: argparse.ArgumentParser) -> None:
    """Optics options; each overrides the station file."""
    group = parser.add_argument_group("optics (override the station file; without one they suffice)")
    group.add_argument("--mm-per-px", type=float, metavar="F", help="scale in the plane of the stream")
    group.add_argument("--contact", metavar="X,Y", help="contact point in px; may lie outside the picture")
    group.add_argument("--direction", type=float, metavar="DEG", help="stream axis: 0 along +x, positive towards +y")
    group.add_argument("--exposure-ms", type=float, metavar="F", help="exposure in ms")
    group.add_argument("--fps", type=float, metavar="F", help="frames a second at which the pictures were taken")


def add_bands(parser: argparse.ArgumentParser) -> None:
    """``--bands DIR``."""
    parser.add_argument("--bands", metavar="DIR", help="folder of band files (overrides judge.bands)")


def has_station_file(args: argparse.Namespace) -> bool:
    """Whether a station file is named, or lies where the command was given."""
    return bool(getattr(args, "station", None)) or Path(DEFAULT_STATION).exists()


def load_settings(args: argparse.Namespace) -> tuple[Settings, Path]:
    """Settings from the station file and the options given, and the folder that relative paths start from.

    Options known here: those of ``add_station``, ``add_optics``, ``add_bands``, and ``source``, ``expect``,
    ``journal`` where the command declares them. Raises ``SettingsError``.
    """
    path = Path(getattr(args, "station", None) or DEFAULT_STATION)
    from_file = has_station_file(args)
    data: dict[str, Any] = read_toml(path) if from_file else {}
    for option, section, key in (
        ("mm_per_px", "optics", "mm_per_px"),
        ("direction", "optics", "direction_deg"),
        ("exposure_ms", "optics", "exposure_ms"),
        ("fps", "optics", "fps"),
        ("contact", "optics", "contact_px"),
        ("source", "source", "uri"),
        ("expect", "judge", "expect"),
    ):
        value = getattr(args, option, None)
        if value is not None:
            data = _with(data, section, key, _pair(value) if option == "contact" else value)
    for option, section, key in (("bands", "judge", "bands"), ("journal", "journal", "file")):
        value = getattr(args, option, None)
        if value is not None:  # a path on the command line is relative to where the command was given
            data = _with(data, section, key, str(Path(value).absolute()))
    return read_settings(data, file=str(path) if from_file else "options"), path.parent if from_file else Path()


def _with(data: dict[str, Any], section: str, key: str, value: Any) -> dict[str, Any]:
    part = data.get(section, {})
    return {**data, section: {**part, key: value}} if isinstance(part, dict) else data


def _pair(text: str) -> list[float]:
    try:
        x, y = (float(part) for part in text.split(","))
    except ValueError:
        raise SettingsError(f"--contact {text}: two numbers X,Y in px are needed, such as 40,200") from None
    return [x, y]


def with_picture_size(settings: Settings, width_px: int, height_px: int) -> Settings:
    """The same settings for a source that turned out to deliver another picture size (clips, pictures)."""
    source = dataclasses.replace(settings.source, width_px=width_px, height_px=height_px)
    return dataclasses.replace(settings, source=source)
