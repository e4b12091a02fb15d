"""``edgewatch watch``: run the station until told to stop, or until a clip ends."""

from __future__ import annotations

import argparse
import contextlib
import dataclasses
import gc
import json
import math
import signal
import sys
import tempfile
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from edgewatch.commands.options import add_bands, add_optics, add_station, has_station_file, load_settings
from edgewatch.settings import Settings
from edgewatch.station.station import Outcome, Station
from edgewatch.wire.messages import plain

EXAMPLE = "edgewatch watch --station station.toml --source clip:shift.mkv --expect C45 --json"
LIVE = ("camera", "stream")
"""Kinds of source that run at their own pace unless told otherwise; a clip, a pipe and the rehearsal wait."""


def declare(parser: argparse.ArgumentParser) -> None:
    """Options of ``watch``."""
    add_station(parser)
    parser.add_argument("--source", metavar="URI", help="camera:DEV, clip:PATH, pipe:- or FIFO, stream:URL, rehearsal:")
    parser.add_argument("--expect", metavar="GRADE", help="grade on the line")
    parser.add_argument(
        "--journal", metavar="FILE", help="journal file (default: as configured; without a station file none is kept)"
    )
    parser.add_argument(
        "--pace",
        choices=("real", "fast"),
        help="real: at the source's own rate, newest frames win on a pipe; fast: as fast as this machine judges, "
        "nothing is skipped (default: real for cameras and streams, fast for clips, pipes and the rehearsal)",
    )
    parser.add_argument("--json", action="store_true", help="one JSON line a bar")
    add_bands(parser)
    add_optics(parser)


def run(args: argparse.Namespace) -> int:
    """Run ``watch``."""
    settings, folder = load_settings(args)
    with contextlib.ExitStack() as stack:
        if not has_station_file(args) and args.journal is None:
            scratch = stack.enter_context(tempfile.TemporaryDirectory(prefix="edgewatch-"))
            settings = without_keeping(settings, Path(scratch))
        return _watch(args, settings, folder)


def without_keeping(settings: Settings, scratch: Path) -> Settings:
    """A look at a clip without a station leaves nothing behind: its journal is thrown away, pictures are not kept."""
    return dataclasses.replace(
        settings,
        journal=dataclasses.replace(settings.journal, file=str(scratch / "journal.sqlite")),
        evidence=dataclasses.replace(settings.evidence, folder=""),
    )


def _watch(args: argparse.Namespace, settings: Settings, folder: Path) -> int:
    real = args.pace == "real" or (args.pace is None and settings.source.uri.partition(":")[0] in LIVE)
    station = Station(
        settings,
        folder,
        live=real,
        paced=real,
        named=args.expect,
        on_told=print_json if args.json else print_bar,
        on_notice=lambda text: print(f"edgewatch: {text}", file=sys.stderr, flush=True),
    )
    gc.collect()
    gc.freeze()  # what is there now stays: going through it would hold up a frame by 12 to 40 ms, as measured
    run_until_stopped(station)
    return 0


def run_until_stopped(station: Station) -> Outcome:
    """Run the station; SIGINT and SIGTERM end it in good order, a second SIGINT at once."""

    def stop(number: int, frame: object) -> None:
        station.request_stop()
        signal.signal(signal.SIGINT, signal.default_int_handler)

    before = {number: signal.signal(number, stop) for number in (signal.SIGINT, signal.SIGTERM)}
    try:
        return station.run()
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)


def print_json(line: Mapping[str, Any]) -> None:
    """One bar as a JSON line."""
    print(json.dumps(plain(line), ensure_ascii=False, allow_nan=False), flush=True)


def print_bar(line: Mapping[str, Any]) -> None:
    """One bar as a line for people."""
    print(bar_text(line), flush=True)


def bar_text(line: Mapping[str, Any]) -> str:
    """Number, time, expected grade, verdict, figures, what it looks like, causes."""
    reach = line["reach_mm"]
    nearest = line["nearest"][0] if line["nearest"] else None
    parts = [
        f"bar {line['bar']:>4}",
        f"{line['begin_s']:8.2f} s",
        f"{line['expected'] or '-':<10}",
        f"{line['verdict']:<13}",
        f"{line['burst_rate_per_m']:6.2f} /m",
        f"({line['burst_rate_low_per_m']:.2f} to {line['burst_rate_high_per_m']:.2f})",
        f"reach {reach:4.0f} mm{' cut' if line['reach_truncated'] else ''}" if math.isfinite(reach) else "reach -",
        f"after {line['decided_after_s']:.2f} s",
    ]
    if nearest is not None:
        parts.append(f"nearest {nearest[0]} {nearest[1]:.2f}")
    if line["causes"]:
        parts.append(", ".join(line["causes"]))
    return "  ".join(parts)
