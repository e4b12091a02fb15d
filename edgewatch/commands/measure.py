"""``edgewatch measure CLIP…``: figures of a recording."""

from __future__ import annotations

import argparse
import dataclasses
import json
import math
from collections.abc import Sequence
from pathlib import Path
from typing import Any, TextIO

import numpy as np

from edgewatch.commands.measuring import Measurement, Watcher, figures_body, measure_clip
from edgewatch.commands.options import add_optics, add_station, load_settings
from edgewatch.errors import DeviceError, SettingsError
from edgewatch.figures.flightfit import FlightFit, FlightLinker
from edgewatch.figures.meter import BarDone
from edgewatch.figures.values import Figures
from edgewatch.monitor.annotate import annotate, encode_jpeg
from edgewatch.monitor.exhibits import Exhibits
from edgewatch.sight.detections import Detections
from edgewatch.sight.frame import Frame

EXAMPLE = "edgewatch measure bar.mkv --mm-per-px 0.8 --contact 20,200 --direction 0 --exposure-ms 2.5 --fps 200 --json"


def declare(parser: argparse.ArgumentParser) -> None:
    """Options of ``measure``."""
    parser.add_argument("clips", nargs="+", metavar="CLIP", help="video file or folder of pictures")
    add_station(parser)
    add_optics(parser)
    parser.add_argument("--json", action="store_true", help="one JSON object a clip")
    parser.add_argument(
        "--detections", metavar="OUT.jsonl", help="write streaks and bursts of every frame, one JSON line a frame"
    )
    parser.add_argument(
        "--picture", metavar="OUT.jpg", help="write the frame with the most to see, streaks and bursts drawn into it"
    )
    parser.add_argument(
        "--flight",
        action="store_true",
        help="link streaks over frames and fit particle radius and launch speed (400 frames/s or more)",
    )


def run(args: argparse.Namespace) -> int:
    """Run ``measure``."""
    settings, _ = load_settings(args)
    if args.picture and len(args.clips) > 1:
        raise SettingsError(f"--picture {args.picture}: only with one clip")
    best = Exhibits(1) if args.picture else None
    out = _open(args.detections) if args.detections else None
    try:
        for clip in args.clips:
            linker = FlightLinker(settings.sight_optics()) if args.flight else None
            found = measure_clip(clip, settings, watcher=_watcher(out, linker, best))
            _print(found, linker.fit() if linker else None, as_json=args.json, named=len(args.clips) > 1)
    except OSError as error:
        raise DeviceError(f"{args.detections}: cannot be written: {error.strerror or error}") from error
    finally:
        if out is not None:
            out.close()
    if best is not None:
        _write_picture(Path(args.picture), found, best)
    return 0


def _write_picture(path: Path, found: Measurement, best: Exhibits) -> None:
    """Annotate the worthiest frame. Raises ``DeviceError`` when there is none or it cannot be written."""
    if not best.kept:
        raise DeviceError(f"{path}: not written: nothing was seen in {found.clip}")
    (one,) = best.kept
    caption = f"{one.t_s:.3f} s: {len(one.detections.streaks)} streaks, {len(one.detections.bursts)} bursts"
    try:
        path.write_bytes(encode_jpeg(annotate(one.picture, one.detections, found.optics, [caption])))
    except OSError as error:
        raise DeviceError(f"{path}: cannot be written: {error.strerror or error}") from error


def _open(name: str) -> TextIO:
    try:
        return Path(name).open("w", encoding="utf-8")
    except OSError as error:
        raise DeviceError(f"{name}: cannot be written: {error.strerror or error}") from error


def _watcher(out: TextIO | None, linker: FlightLinker | None, best: Exhibits | None) -> Watcher | None:
    """What is done with the detections of every frame besides the figures."""
    if out is None and linker is None and best is None:
        return None

    def watch(frame: Frame, seen: Detections) -> None:
        if out is not None:
            _write(out, frame.index, frame.t_s, seen)
        if linker is not None:
            linker.add(seen.streaks, seen.streak_flags, frame.t_s)
        if best is not None:
            best.offer(frame.picture, seen, frame.t_s)

    return watch


def _write(out: TextIO, index: int, t_s: float, seen: Detections) -> None:
    """One line of the contract: streaks and the bursts that first show in this frame."""
    bursts = [
        [round(float(x), 2), round(float(y), 2), int(arms)]
        for (x, y), arms in zip(seen.bursts.tolist(), seen.burst_arms.tolist(), strict=True)
    ]
    streaks = [[round(float(part), 2) for part in streak] for streak in seen.streaks.tolist()]
    line = {"frame": index, "t": round(t_s, 9), "streaks": streaks, "bursts": bursts}
    out.write(json.dumps(line, allow_nan=False, separators=(",", ":")) + "\n")


def measurement_body(found: Measurement) -> dict[str, Any]:
    """The JSON object of one clip."""
    times = found.processing_s * 1000.0
    body = {"clip": found.clip, "frames": found.frames, "seconds": found.seconds}
    body |= _without(_clip_figures(found.whole), ("begin_s", "end_s", "frames_seen"))
    body["contacts"] = [_contact_body(contact) for contact in found.contacts]
    body["processing_ms"] = {
        "median": float(np.median(times)) if times.size else None,
        "p95": float(np.percentile(times, 95)) if times.size else None,
    }
    return body


def _clip_figures(figures: Figures) -> dict[str, Any]:
    """The figures with ``bursts`` as listed frame by frame; ``rate_bursts`` of them count for the burst-rate."""
    body = figures_body(figures)
    return body | {"bursts": body.pop("bursts_listed"), "rate_bursts": body["bursts"]}


def _contact_body(contact: BarDone) -> dict[str, Any]:
    body = _clip_figures(contact.bar)
    frames = body.pop("frames_seen")
    seconds = contact.bar.end_s - contact.bar.begin_s
    return body | {"begin_s": contact.begin_s, "end_s": contact.end_s, "frames": frames, "seconds": seconds}


def _flight_body(fit: FlightFit) -> dict[str, Any]:
    """The fit under its names, NaN as ``None``."""
    values = dataclasses.asdict(fit)
    return {name: None if isinstance(v, float) and math.isnan(v) else v for name, v in values.items()}


def _flight_line(fit: FlightFit) -> str:
    if not fit.usable:
        return "flight: the frame rate is too low to follow particles; record a clip at 400 frames/s or more"
    if not fit.particles:
        return f"flight: no particle could be followed over enough frames ({fit.chains} chains)"
    return (
        f"flight: {fit.particles} particles, radius {fit.radius_um:.0f} um ({fit.radius_low_um:.0f} to "
        f"{fit.radius_high_um:.0f}), launch speed {fit.launch_speed_m_s:.1f} m/s ({fit.launch_speed_low_m_s:.1f} to "
        f"{fit.launch_speed_high_m_s:.1f}), medians and quartiles; residual {fit.residual_px:.2f} px"
    )


def _without(body: dict[str, Any], names: Sequence[str]) -> dict[str, Any]:
    return {name: value for name, value in body.items() if name not in names}


def _print(found: Measurement, fit: FlightFit | None, *, as_json: bool, named: bool) -> None:
    body = measurement_body(found)
    if as_json:
        if fit is not None:
            body["flight"] = _flight_body(fit)
        print(json.dumps(body, allow_nan=False), flush=True)
        return
    if named:
        print(found.clip)
    times = body["processing_ms"]
    if fit is not None:
        print(_flight_line(fit))
    print(f"{found.frames} frames, {found.seconds:.2f} s, {len(found.contacts)} contacts")
    print(_line("whole", body))
    for number, contact in enumerate(body["contacts"], 1):
        print(_line(f"contact {number}: {contact['begin_s']:.2f} to {contact['end_s']:.2f} s", contact))
    if times["median"] is not None:
        print(f"processing {times['median']:.2f} ms a frame (median), {times['p95']:.2f} ms (95 %)", flush=True)


def _line(what: str, body: dict[str, Any]) -> str:
    def number(name: str, form: str) -> str:
        value = body[name]
        return "-" if value is None or (isinstance(value, float) and math.isnan(value)) else format(value, form)

    return (
        f"{what}: {body['streaks']} streaks, {body['bursts']} bursts, track {number('track_m', '.2f')} m, "
        f"burst-rate {number('burst_rate_per_m', '.3f')} /m "
        f"({number('burst_rate_low_per_m', '.3f')} to {number('burst_rate_high_per_m', '.3f')}), "
        f"reach {number('reach_mm', '.0f')} mm{' (cut off)' if body['reach_truncated'] else ''}, "
        f"{number('streaks_per_frame', '.1f')} streaks a frame, spark speed {number('spark_speed_m_s', '.1f')} m/s"
    )
