"""Bands: what a grade may show, and how that was taught. Values <-> TOML; the files are read and written elsewhere."""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from edgewatch.errors import SettingsError
from edgewatch.settings import GRADE_NAME
from edgewatch.sight.optics import Optics

SCHEMA = "edgewatch.band/1"
"""Name and version of the file's layout."""
SCALE_TOLERANCE = 0.05
"""Scale may differ by this share: a camera set up again is measured to a few per cent."""
TIMING_TOLERANCE = 0.02
"""Exposure and frame rate may differ by this share: drivers round them, a real change is larger."""
HIGHEST_RATE_PER_M = 1000.0
"""A burst-rate above this (one a millimetre) is a mistake."""
HIGHEST_MM = 1e5
"""A reach above this (100 m) is a mistake."""


@dataclass(frozen=True, slots=True, kw_only=True)
class ReferenceBar:
    """One bar of the teaching: its own figures, so that bars can be added or left out later.

    ``number`` counts from 1. ``rate_misfit`` is Pearson's sum over the bar's windows of (bursts - expected)^2 over
    expected, with ``rate_freedom`` degrees of freedom; ``reach_misfit`` (mm^2 m) the sum over windows of track times
    squared deviation of reach from the bar's, with ``reach_freedom``. ``reach_mm`` comes from the settled windows,
    which hold ``reach_track_m`` of track and last ``window_s``; it is NaN when it was not measured or cut off.
    ``streak_peak_dn``, ``streak_width_px``: height above ground and width of the bar's streaks;
    ``None``: not known.
    """

    number: int
    clip: str
    begin_s: float
    end_s: float
    frames: int
    streaks: int
    bursts: int
    track_m: float
    exposure_m: float
    reach_mm: float
    reach_track_m: float
    cut_share: float
    spark_speed_m_s: float
    rate_misfit: float = 0.0
    rate_freedom: int = 0
    reach_misfit: float = 0.0
    reach_freedom: int = 0
    window_s: float = 0.25
    streak_peak_dn: float | None = None
    streak_width_px: float | None = None
    left_out: bool = False


@dataclass(frozen=True, slots=True, kw_only=True)
class Band:
    """The band of one grade. Raises ``ValueError`` when it is empty, upside down or out of range.

    ``rate_center_per_m``, ``rate_scatter``: median over bars of the true hazard, and the standard deviation of its
    logarithm from bar to bar with the sampling noise taken out. ``rate_dispersion``: variance over mean of burst
    counts within a bar (1: Poisson). ``reach_center_mm``, ``reach_scatter``: the same for reach.
    ``reach_noise_mm2_m``: variance of reach times track, for sums of many windows. Reach fields are ``None`` when the
    streams taught were cut off by the picture's edge. ``streak_peak_dn``, ``streak_width_px``: typical height (DN) and
    width (px) of streaks, with the standard deviation of the logarithm from bar to bar; ``None``: not known, so the
    lens is not judged by this band. Optics, exposure and frame rate are those of the teaching; NaN is
    not known. ``taught``: date (RFC 3339); ``clock_synced``: whether the clock that gave it was synchronised, ``None``:
    not known. ``bars`` include those left out.
    """

    grade: str
    burst_rate_low_per_m: float
    burst_rate_high_per_m: float
    reach_low_mm: float | None = None
    reach_high_mm: float | None = None
    content: float = 0.99
    confidence: float = 0.95
    bars_used: int = 0
    bursts: int = 0
    track_m: float = 0.0
    rate_center_per_m: float = math.nan
    rate_scatter: float = math.nan
    rate_dispersion: float = 1.0
    reach_center_mm: float | None = None
    reach_scatter: float | None = None
    reach_noise_mm2_m: float | None = None
    streak_peak_dn: float | None = None
    streak_peak_scatter: float | None = None
    streak_width_px: float | None = None
    streak_width_scatter: float | None = None
    mm_per_px: float = math.nan
    contact_px: tuple[float, float] = (math.nan, math.nan)
    direction_deg: float = math.nan
    width_px: int = 0
    height_px: int = 0
    exposure_ms: float = math.nan
    fps: float = math.nan
    wheel_speed_m_s: float = math.nan
    spark_speed_m_s: float = math.nan
    streaks_per_frame: float = math.nan
    taught: str = ""
    clock_synced: bool | None = None
    bars: tuple[ReferenceBar, ...] = ()

    def __post_init__(self) -> None:
        """Check once, and fill in what follows from the limits where a band was written by hand."""
        problems = _problems(self)
        if problems:
            raise ValueError("; ".join(f"{key} = {value!r}: {allowed}" for key, value, allowed in problems))
        high = self.burst_rate_high_per_m
        low = max(self.burst_rate_low_per_m, 1e-3 * high)  # a band from 0 has a logarithm too
        if math.isnan(self.rate_center_per_m):
            object.__setattr__(self, "rate_center_per_m", math.sqrt(low * high))
        if math.isnan(self.rate_scatter):
            object.__setattr__(self, "rate_scatter", math.log(high / low) / (2.0 * _HAND_FACTOR))
        if self.reach_low_mm is not None and self.reach_high_mm is not None:
            reach_low = max(self.reach_low_mm, 1e-3 * self.reach_high_mm)
            if self.reach_center_mm is None:
                object.__setattr__(self, "reach_center_mm", math.sqrt(reach_low * self.reach_high_mm))
            if self.reach_scatter is None:
                scatter = math.log(self.reach_high_mm / reach_low) / (2.0 * _HAND_FACTOR)
                object.__setattr__(self, "reach_scatter", scatter)

    @property
    def has_reach(self) -> bool:
        """Whether reach is judged."""
        return self.reach_low_mm is not None

    def misfit(self, optics: Optics) -> tuple[str, ...]:
        """Causes why the band must not be used with these optics: scale, exposure or frame rate differ."""
        found = []
        for cause, taught, now, tolerance in (
            ("band_misfit_scale", self.mm_per_px, optics.mm_per_px, SCALE_TOLERANCE),
            ("band_misfit_exposure", self.exposure_ms, optics.exposure_ms, TIMING_TOLERANCE),
            ("band_misfit_rate", self.fps, optics.fps, TIMING_TOLERANCE),
        ):
            if math.isfinite(taught) and abs(now - taught) > tolerance * taught:
                found.append(cause)
        return tuple(found)


_HAND_FACTOR = 3.6
"""Half-width of a taught band in scatters (20 bars, 99 % content, 95 % confidence), for bands written by hand."""

_POSITIVE = "a number above 0"


def _real(value: Any) -> bool:
    return isinstance(value, (int, float)) and not isinstance(value, bool)


def _problems(band: Band) -> list[tuple[str, Any, str]]:
    """(key, value, what is allowed) of everything that is wrong with the band."""
    found: list[tuple[str, Any, str]] = []
    if not (isinstance(band.grade, str) and GRADE_NAME.fullmatch(band.grade)):
        found.append(("grade", band.grade, "allowed are letters, digits and . _ + -, 40 at most"))
    for low_key, high_key, highest in (
        ("burst_rate_low_per_m", "burst_rate_high_per_m", HIGHEST_RATE_PER_M),
        ("reach_low_mm", "reach_high_mm", HIGHEST_MM),
    ):
        low, high = getattr(band, low_key), getattr(band, high_key)
        if low is None and high is None and low_key.startswith("reach"):
            continue
        fine = True
        for key, value in ((low_key, low), (high_key, high)):
            if not (_real(value) and math.isfinite(value) and 0.0 <= value <= highest):
                found.append((key, value, f"allowed is a number from 0 to {highest:g}"))
                fine = False
        if fine and not low < high:
            found.append((high_key, high, f"allowed is a number above {low_key} = {low!r}"))
    for key in ("content", "confidence"):
        value = getattr(band, key)
        if not (_real(value) and 0.0 < value < 1.0):
            found.append((key, value, "allowed is a number between 0 and 1"))
    if not (_real(band.rate_dispersion) and 1.0 <= band.rate_dispersion <= 1e4):
        found.append(("rate_dispersion", band.rate_dispersion, "allowed is a number from 1 to 10000"))
    for key in (
        "rate_center_per_m",
        "reach_center_mm",
        "streak_peak_dn",
        "streak_width_px",
        "mm_per_px",
        "exposure_ms",
        "fps",
    ):
        value = getattr(band, key)
        if value is None and key.startswith(("reach", "streak")):
            continue
        if not (_real(value) and (math.isnan(value) or 0.0 < value < math.inf)):
            found.append((key, value, f"allowed is {_POSITIVE}"))
    for key in ("rate_scatter", "reach_scatter", "reach_noise_mm2_m", "streak_peak_scatter", "streak_width_scatter"):
        value = getattr(band, key)
        if value is None and key.startswith(("reach", "streak")):
            continue
        if not (_real(value) and (math.isnan(value) or 0.0 <= value < math.inf)):
            found.append((key, value, "allowed is a number of at least 0"))
    return found


_SECTIONS: dict[str, dict[str, str]] = {
    "burst_rate": {
        "low_per_m": "burst_rate_low_per_m",
        "high_per_m": "burst_rate_high_per_m",
        "center_per_m": "rate_center_per_m",
        "scatter": "rate_scatter",
        "dispersion": "rate_dispersion",
    },
    "reach": {
        "low_mm": "reach_low_mm",
        "high_mm": "reach_high_mm",
        "center_mm": "reach_center_mm",
        "scatter": "reach_scatter",
        "noise_mm2_m": "reach_noise_mm2_m",
    },
    "streaks": {
        "peak_dn": "streak_peak_dn",
        "peak_scatter": "streak_peak_scatter",
        "width_px": "streak_width_px",
        "width_scatter": "streak_width_scatter",
    },
    "teaching": {
        "content": "content",
        "confidence": "confidence",
        "bars_used": "bars_used",
        "bursts": "bursts",
        "track_m": "track_m",
        "wheel_speed_m_s": "wheel_speed_m_s",
        "spark_speed_m_s": "spark_speed_m_s",
        "streaks_per_frame": "streaks_per_frame",
        "taught": "taught",
        "clock_synced": "clock_synced",
    },
    "optics": {
        "mm_per_px": "mm_per_px",
        "contact_px": "contact_px",
        "direction_deg": "direction_deg",
        "width_px": "width_px",
        "height_px": "height_px",
        "exposure_ms": "exposure_ms",
        "fps": "fps",
    },
}
"""Section -> key in the file -> field of ``Band``; the order of the file."""

_KINDS: dict[str, Any] = {
    **dict.fromkeys(("bars_used", "bursts", "width_px", "height_px", "number", "frames", "streaks"), int),
    **dict.fromkeys(("rate_freedom", "reach_freedom"), int),
    **dict.fromkeys(("grade", "taught", "clip"), str),
    **dict.fromkeys(("left_out", "clock_synced"), bool),
    "contact_px": tuple,
}
_ALLOWED = {int: "a whole number of at least 0", str: "text", bool: "true or false", float: "a number"}


def _converted(name: str, value: Any) -> Any:
    """``value`` in the type of the field, or ``ValueError`` saying what is allowed."""
    kind = _KINDS.get(name, float)
    if kind is tuple:
        if not (isinstance(value, (list, tuple)) and len(value) == 2 and all(_real(part) for part in value)):
            raise ValueError("allowed is a list of two numbers")
        return float(value[0]), float(value[1])
    if kind is float and _real(value):
        return float(value)
    if kind is float or not isinstance(value, kind) or (kind is int and (isinstance(value, bool) or value < 0)):
        raise ValueError(f"allowed is {_ALLOWED[kind]}")
    return value


def read_band(data: Mapping[str, Any], *, file: str) -> Band:
    """Check a parsed band file and return the band; ``file`` is only named in errors.

    Raises ``SettingsError`` with every problem: unknown or missing keys, wrong types, an empty or upside-down band.
    """
    problems: list[str] = []
    kept: dict[str, Any] = {}
    data = dict(data)
    schema = data.pop("schema", SCHEMA)
    if schema != SCHEMA:
        raise SettingsError(f"{file}: schema = {schema!r}: allowed is {SCHEMA!r}")
    if "grade" not in data:
        problems.append(f"{file}: grade is missing: the name of the grade is needed")
    else:
        kept["grade"] = data.pop("grade")
    bars = data.pop("bars", [])
    for section, content in data.items():
        known = _SECTIONS.get(section)
        if known is None:
            problems.append(f"{file}: {section}: no such section; known are {', '.join(_SECTIONS)} and bars")
        elif not isinstance(content, Mapping):
            problems.append(f"{file}: {section} = {content!r}: allowed is a section [{section}] with keys")
        else:
            _read_keys(content, known, f"{file}: {section}", kept, problems)
    for key in ("low_per_m", "high_per_m"):
        if _SECTIONS["burst_rate"][key] not in kept and not problems:
            problems.append(f"{file}: burst_rate.{key} is missing: a number is needed")
    if not problems:
        kept["bars"] = tuple(_read_bars(bars, file, problems))
    if problems:
        raise SettingsError(*problems)
    return _checked(kept, file)


def _read_keys(
    content: Mapping[str, Any], known: Mapping[str, str], where: str, kept: dict[str, Any], problems: list[str]
) -> None:
    for key, value in content.items():
        if key not in known:
            problems.append(f"{where}.{key} = {value!r}: no such key; known are {', '.join(known)}")
            continue
        try:
            kept[known[key]] = _converted(known[key], value)
        except ValueError as error:
            problems.append(f"{where}.{key} = {value!r}: {error}")


def _read_bars(bars: Any, file: str, problems: list[str]) -> list[ReferenceBar]:
    if not (isinstance(bars, list) and all(isinstance(bar, Mapping) for bar in bars)):
        problems.append(f"{file}: bars: allowed is a list of [[bars]] sections")
        return []
    names = {part.name: part.name for part in dataclasses.fields(ReferenceBar)}
    needed = {part.name for part in dataclasses.fields(ReferenceBar) if part.default is dataclasses.MISSING}
    found = []
    for place, bar in enumerate(bars, 1):
        kept: dict[str, Any] = {}
        before = len(problems)
        _read_keys(bar, names, f"{file}: bars[{place}]", kept, problems)
        problems += [f"{file}: bars[{place}].{name} is missing" for name in sorted(needed - kept.keys())]
        for name, value in kept.items():
            if isinstance(value, float) and not name.startswith(("reach", "spark")) and not 0.0 <= value < math.inf:
                problems.append(f"{file}: bars[{place}].{name} = {value!r}: allowed is a number of at least 0")
        if len(problems) == before:
            found.append(ReferenceBar(**kept))
    return found


def _checked(kept: dict[str, Any], file: str) -> Band:
    """The band, or errors in the file's own words."""
    try:
        return Band(**kept)
    except ValueError:
        names = {name: f"{section}.{key}" for section, keys in _SECTIONS.items() for key, name in keys.items()}
        defaults = {part.name: part.default for part in dataclasses.fields(Band)}
        probe = _Probe({**defaults, **kept})
        raise SettingsError(
            *(f"{file}: {names.get(key, key)} = {value!r}: {allowed}" for key, value, allowed in _problems(probe))  # type: ignore[arg-type]
        ) from None


class _Probe:
    """The fields of a band that could not be built, for the error texts."""

    def __init__(self, fields: Mapping[str, Any]) -> None:
        self.__dict__.update(fields)


def _toml(value: Any) -> str:
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, int):
        return str(value)
    if isinstance(value, float):
        if math.isnan(value):
            return "nan"
        if math.isinf(value):
            return "inf" if value > 0 else "-inf"
        text = f"{value:.9g}"
        return text if any(mark in text for mark in ".e") else f"{text}.0"
    if isinstance(value, tuple):
        return "[" + ", ".join(_toml(part) for part in value) + "]"
    escaped = str(value).replace("\\", "\\\\").replace('"', '\\"')
    return '"' + "".join(c if c.isprintable() else _escape(ord(c)) for c in escaped) + '"'


def _escape(code: int) -> str:
    if 0xD800 <= code <= 0xDFFF:  # bytes of a file name that are no text
        return "?"
    return f"\\u{code:04x}" if code <= 0xFFFF else f"\\U{code:08x}"


def band_toml(band: Band) -> str:
    """The band as the text of a TOML file; ``read_band`` of it gives the same band to nine digits."""
    lines = [f"schema = {_toml(SCHEMA)}", f"grade = {_toml(band.grade)}"]
    for section, keys in _SECTIONS.items():
        values = [(key, getattr(band, name)) for key, name in keys.items() if getattr(band, name) is not None]
        if values:
            lines += ["", f"[{section}]", *(f"{key} = {_toml(value)}" for key, value in values)]
    for bar in band.bars:
        lines += ["", "[[bars]]"]
        known = [(part.name, getattr(bar, part.name)) for part in dataclasses.fields(ReferenceBar)]
        lines += [f"{name} = {_toml(value)}" for name, value in known if value is not None]
    return "\n".join(lines) + "\n"
