"""``edgewatch contrast``: which taught grades this station can tell apart, and the contact time each pair takes."""

from __future__ import annotations

import argparse
import json
import math
from collections.abc import Sequence
from pathlib import Path
from typing import Any

from edgewatch.commands.measuring import check_number_options
from edgewatch.commands.options import add_bands, add_station, load_settings
from edgewatch.errors import SettingsError
from edgewatch.judge.bands import Band
from edgewatch.judge.contrast import OWN_SHARE, Pair, contrast
from edgewatch.record.bandfiles import load_bands

EXAMPLE = "edgewatch contrast --bands calib/bands --track-m-s 150 --json"


def declare(parser: argparse.ArgumentParser) -> None:
    """Options of ``contrast``."""
    add_station(parser)
    add_bands(parser)
    parser.add_argument(
        "--track-m-s",
        type=float,
        metavar="F",
        help="track seen a second of contact (m/s), as `measure` states it (default: as when the bands were taught)",
    )
    parser.add_argument("--false-alarm", type=float, metavar="F", help="risk (overrides judge.false_alarm)")
    parser.add_argument("--miss", type=float, metavar="F", help="risk (overrides judge.miss)")
    parser.add_argument("--picture", metavar="PNG", help="draw the table (extra: desk)")
    parser.add_argument("--json", action="store_true", help="one JSON object")


def run(args: argparse.Namespace) -> int:
    """Run ``contrast``."""
    check_number_options({"--false-alarm": args.false_alarm, "--miss": args.miss}, 1e-6, 0.2)
    check_number_options({"--track-m-s": args.track_m_s}, 1e-3, 1e6)
    settings, folder = load_settings(args)
    where = folder / settings.judge.bands
    bands = list(load_bands(where).values())
    if len(bands) < 2:
        raise SettingsError(f"judge.bands = {settings.judge.bands!r}: {where} holds {len(bands)} bands; two are needed")
    track_m_s = args.track_m_s if args.track_m_s is not None else taught_track_m_s(bands)
    miss = settings.judge.miss if args.miss is None else args.miss
    false_alarm = settings.judge.false_alarm if args.false_alarm is None else args.false_alarm
    pairs = contrast(bands, miss=miss, track_m_s=track_m_s, false_alarm=false_alarm)
    if args.picture:
        from edgewatch.commands.report import draw_contrast

        draw_contrast(Path(args.picture), [band.grade for band in bands], pairs)
    if args.json:
        body = {"track_m_s": track_m_s, "false_alarm": false_alarm, "miss": miss, "pairs": [_body(p) for p in pairs]}
        print(json.dumps(body, allow_nan=False))
    else:
        _print(pairs, track_m_s, false_alarm, miss)
    return 0


def taught_track_m_s(bands: Sequence[Band]) -> float:
    """Track a second of contact when the bands were taught: the weakest grade's. ``SettingsError`` if unknown."""
    rates = []
    for band in bands:
        bars = [bar for bar in band.bars if not bar.left_out and bar.end_s > bar.begin_s]
        seconds = sum(bar.end_s - bar.begin_s for bar in bars)
        if seconds > 0.0:
            rates.append(sum(bar.track_m for bar in bars) / seconds)
    if not rates or not min(rates) > 0.0:
        raise SettingsError("--track-m-s: needed, because the bands hold no reference bars")
    return min(rates)


def _body(pair: Pair) -> dict[str, Any]:
    def known(value: float) -> float | None:
        return value if math.isfinite(value) else None

    return {
        "expected": pair.expected,
        "actual": pair.actual,
        "told_apart": pair.told_apart,
        "by": pair.by,
        "track_m": known(pair.track_m),
        "seconds": known(pair.seconds),
        "alert_seconds": known(pair.alert_seconds),
        "limit_share": pair.limit_share,
    }


def _print(pairs: Sequence[Pair], track_m_s: float, false_alarm: float, miss: float) -> None:
    print(f"track {track_m_s:.1f} m a second of contact, false alarm {false_alarm:g}, miss {miss:g}")
    print(f"{'expected':<14}{'on the wheel':<14}{'told apart':<12}{'by':<12}{'after':>10}{'alert after':>14}")
    for pair in pairs:
        after = f"{pair.seconds:.2f} s" if pair.told_apart else "never"
        alert = f"{pair.alert_seconds:.2f} s" if math.isfinite(pair.alert_seconds) else "never"
        told = "yes" if pair.told_apart else "NO"
        print(f"{pair.expected:<14}{pair.actual:<14}{told:<12}{pair.by:<12}{after:>10}{alert:>14}")
    for pair in pairs:
        if not pair.told_apart:
            print(
                f"{pair.actual} cannot be told from {pair.expected} here: at most "
                f"{100 * pair.limit_share:.0f} % of {pair.expected} bars differ enough ({100 * OWN_SHARE:.0f} % needed)"
            )
