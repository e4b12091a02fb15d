"""``edgewatch teach GRADE CLIP…``: reference bars -> a band file."""

from __future__ import annotations

import argparse
import datetime
import json
import math
import sys
from collections.abc import Sequence
from pathlib import Path
from typing import Any

from edgewatch.commands.measuring import Measurement, check_number_options, measure_clip
from edgewatch.commands.options import add_bands, add_optics, add_station, load_settings
from edgewatch.errors import SettingsError
from edgewatch.judge.bands import Band, ReferenceBar
from edgewatch.judge.teaching import CONFIDENCE, CONTENT, find_outliers, reference_bar, remarks, teach
from edgewatch.judge.verification import Verification, verify
from edgewatch.record.bandfiles import load_band, save_band
from edgewatch.settings import GRADE_NAME, Settings
from edgewatch.sight.optics import Optics

EXAMPLE = "edgewatch teach C45 good-bars.mkv --station station.toml --out calib/bands/C45.toml"


def declare(parser: argparse.ArgumentParser) -> None:
    """Options of ``teach``."""
    parser.add_argument("grade", metavar="GRADE", help="name of the grade")
    parser.add_argument("clips", nargs="*", metavar="CLIP", help="clips of reference bars; every contact is one bar")
    add_station(parser)
    add_optics(parser)
    add_bands(parser)
    parser.add_argument("--out", metavar="FILE", help="band file to write (default: GRADE.toml in the bands folder)")
    parser.add_argument("--add", metavar="BAND", help="band file whose reference bars are kept and added to")
    parser.add_argument("--leave-out", metavar="N,N", default="", help="numbers of bars not to use")
    parser.add_argument("--content", type=float, default=CONTENT, metavar="F", help="share of bars the band holds")
    parser.add_argument("--confidence", type=float, default=CONFIDENCE, metavar="F", help="confidence that it does")
    parser.add_argument("--report", metavar="HTML", help="write a report with plots (extra: desk)")
    parser.add_argument(
        "--verify",
        action="store_true",
        help="the clips show master bars: hold them against the band there is, and change nothing",
    )
    parser.add_argument("--json", action="store_true", help="one JSON object")


def run(args: argparse.Namespace) -> int:
    """Run ``teach``."""
    _check(args)
    settings, folder = load_settings(args)
    out = Path(args.out) if args.out else default_file(args, settings, folder)
    if args.verify:
        return _verify(args, settings, out)
    kept, old = _kept_bars(args.add)
    if args.clips:
        _check_conditions(old, settings, args.add)
    measured = [measure_clip(clip, settings) for clip in args.clips]
    optics = _one_optics(measured, old)
    bars = _numbered(kept, measured)
    band = teach(
        args.grade,
        bars,
        optics=optics,
        left_out=_numbers(args.leave_out),
        content=args.content,
        confidence=args.confidence,
        wheel_speed_m_s=settings.wheel.surface_speed_m_s or math.nan,
        taught=datetime.datetime.now(datetime.timezone.utc).isoformat(timespec="seconds").replace("+00:00", "Z"),
    )
    save_band(out, band)
    if args.report:
        from edgewatch.commands.report import write_report

        write_report(Path(args.report), band)
    _print(band, out, as_json=args.json)
    return 0


def default_file(args: argparse.Namespace, settings: Settings, folder: Path) -> Path:
    """``calib/bands/GRADE.toml``, or the folder of band files where one is configured or named."""
    configured = args.bands is not None or (args.station is not None) or (folder / "station.toml").exists()
    bands = folder / settings.judge.bands if configured else Path("calib/bands")
    return bands / f"{args.grade}.toml"


def _check(args: argparse.Namespace) -> None:
    if not GRADE_NAME.fullmatch(args.grade):
        raise SettingsError(f"GRADE {args.grade!r}: allowed are letters, digits and . _ + -, 40 at most")
    check_number_options({"--content": args.content, "--confidence": args.confidence}, 0.5, 0.9999)
    if not args.clips and not args.add:
        raise SettingsError("CLIP: at least one clip of reference bars is needed, or --add BAND")
    if args.verify and not args.clips:
        raise SettingsError("CLIP: --verify needs a clip of master bars")


def _numbers(text: str) -> list[int]:
    try:
        return [int(part) for part in text.split(",") if part.strip()]
    except ValueError:
        raise SettingsError(
            f"--leave-out {text}: numbers of bars separated by commas are needed, such as 3,17"
        ) from None


def _kept_bars(name: str | None) -> tuple[list[ReferenceBar], Band | None]:
    if name is None:
        return [], None
    band = load_band(Path(name))
    if not band.bars:
        raise SettingsError(f"{name}: bars: holds no reference bars, so none can be added to them")
    return list(band.bars), band


def _one_optics(measured: Sequence[Measurement], old: Band | None) -> Optics:
    """The optics that all clips share; they must be those of the band that is added to."""
    if not measured:
        assert old is not None
        try:
            return Optics(
                width_px=old.width_px,
                height_px=old.height_px,
                mm_per_px=old.mm_per_px,
                contact_px=old.contact_px,
                direction_deg=old.direction_deg,
                exposure_ms=old.exposure_ms,
                fps=old.fps,
            )
        except ValueError as error:
            raise SettingsError(f"--add: optics of the band: {error}") from error
    optics = measured[0].optics
    for one in measured[1:]:
        if one.optics != optics:
            raise SettingsError(f"{one.clip}: picture size differs from {measured[0].clip}: teach them apart")
    return optics


def _check_conditions(band: Band | None, settings: Settings, file: str | Path | None) -> None:
    """Refuse bars of another scale, exposure or frame rate before any clip is read."""
    misfit = band.misfit(settings.sight_optics()) if band else ()
    if misfit:
        raise SettingsError(f"{file}: the band was taught under other conditions: {', '.join(misfit)}")


def _numbered(kept: Sequence[ReferenceBar], measured: Sequence[Measurement]) -> list[ReferenceBar]:
    bars = list(kept)
    number = max((bar.number for bar in bars), default=0)
    for one in measured:
        for contact in one.contacts:
            number += 1
            bars.append(reference_bar(number, Path(one.clip).name, contact.bar, contact.windows))
    return bars


def band_summary(band: Band) -> dict[str, Any]:
    """What was taught, for JSON; NaN as ``None``."""

    def known(value: float | None) -> float | None:
        return value if value is not None and math.isfinite(value) else None

    return {
        "grade": band.grade,
        "bars": band.bars_used,
        "left_out": [bar.number for bar in band.bars if bar.left_out],
        "bursts": band.bursts,
        "track_m": band.track_m,
        "content": band.content,
        "confidence": band.confidence,
        "burst_rate_low_per_m": band.burst_rate_low_per_m,
        "burst_rate_high_per_m": band.burst_rate_high_per_m,
        "rate_center_per_m": band.rate_center_per_m,
        "rate_scatter": band.rate_scatter,
        "rate_dispersion": band.rate_dispersion,
        "reach_low_mm": known(band.reach_low_mm),
        "reach_high_mm": known(band.reach_high_mm),
        "reach_center_mm": known(band.reach_center_mm),
        "reach_scatter": known(band.reach_scatter),
        "spark_speed_m_s": known(band.spark_speed_m_s),
        "wheel_speed_m_s": known(band.wheel_speed_m_s),
        "taught": band.taught,
    }


def _print(band: Band, out: Path, *, as_json: bool) -> None:
    if as_json:
        outliers = [{"bar": one.number, "figure": one.figure, "value": one.value} for one in find_outliers(band.bars)]
        body = band_summary(band) | {"file": str(out), "outliers": outliers, "remarks": remarks(band)}
        print(json.dumps(body, allow_nan=False))
        return
    share = f"{100 * band.content:g} % of bars with {100 * band.confidence:g} % confidence"
    print(f"{band.grade}: {band.bars_used} reference bars, {band.bursts} bursts, track {band.track_m:.1f} m")
    print(
        f"burst-rate {band.burst_rate_low_per_m:.3f} to {band.burst_rate_high_per_m:.3f} /m ({share}); "
        f"centre {band.rate_center_per_m:.3f} /m, scatter {100 * band.rate_scatter:.1f} %, "
        f"dispersion {band.rate_dispersion:.2f}"
    )
    if band.reach_low_mm is not None and band.reach_high_mm is not None:
        print(
            f"reach {band.reach_low_mm:.0f} to {band.reach_high_mm:.0f} mm; centre {band.reach_center_mm:.0f} mm, "
            f"scatter {100 * (band.reach_scatter or 0.0):.1f} %"
        )
    for remark in remarks(band):
        print(f"note: {remark}", file=sys.stderr)
    print(f"written to {out}")


def _verify(args: argparse.Namespace, settings: Settings, path: Path) -> int:
    """Hold master bars against the band there is; exit status 1 if they do not fit."""
    band = load_band(path)
    _check_conditions(band, settings, path)
    measured = [measure_clip(clip, settings) for clip in args.clips]
    masters = [reference_bar(n, "", c.bar, c.windows) for one in measured for n, c in enumerate(one.contacts, 1)]
    found = verify(band, masters)
    if args.json:
        print(json.dumps(_verification_body(found, str(path)), allow_nan=False))
    else:
        print(f"{band.grade}: {found.bars} master bars; {found.sentence}")
        print(f"burst-rate over the taught one: {found.ratio_low:.2f} to {found.ratio_high:.2f} (95 %, counts alone)")
    return 0 if found.holds else 1


def _verification_body(found: Verification, file: str) -> dict[str, Any]:
    def known(value: float) -> float | None:
        return value if math.isfinite(value) else None

    return {
        "file": file,
        "bars": found.bars,
        "holds": found.holds,
        "rate_shift": known(found.rate_shift),
        "rate_limit": known(found.rate_limit),
        "reach_shift": known(found.reach_shift),
        "reach_limit": known(found.reach_limit),
        "ratio_low": known(found.ratio_low),
        "ratio_high": known(found.ratio_high),
        "sentence": found.sentence,
    }
