"""``edgewatch pace``: what frame rate this board sustains, by picture size and stream density."""

from __future__ import annotations

import argparse
import json
import math
import sys
import time
from collections.abc import Iterator
from dataclasses import asdict, dataclass, replace

import numpy as np
from numpy.typing import NDArray

from edgewatch.commands.options import add_optics, add_station, load_settings
from edgewatch.errors import SettingsError
from edgewatch.figures.meter import BarMeter
from edgewatch.rehearsal.scene import Stream
from edgewatch.rehearsal.steel import find_steel
from edgewatch.settings import Settings
from edgewatch.sight import Sight, native
from edgewatch.sight.optics import Optics

EXAMPLE = "edgewatch pace --station station.toml --sparks 500,4000,7000"

SIZES_PX = ((320, 200), (640, 400), (1280, 800))
"""Picture sizes tried beside the station's own."""

PICTURES = 12
"""Different pictures a cell: the sight must not see the same one again at once."""

SEED = 1
"""The same pictures on every board: figures of two boards can be compared."""

STEEL = "C80"
"""Many bursts: the most work a spark makes."""

SLOW_SHARE = 0.95
"""The rate is taken from the time that this share of pictures stays below."""

LEAST_SIDE_PX = 16


@dataclass(frozen=True, slots=True, kw_only=True)
class Cell:
    """What one picture size and density takes. ``sustained_fps`` holds the headroom back."""

    width_px: int
    height_px: int
    sparks_per_s: float
    streaks: float
    median_ms: float
    slow_ms: float
    sustained_fps: float
    enough: bool


def declare(parser: argparse.ArgumentParser) -> None:
    """Options of ``pace``."""
    add_station(parser)
    add_optics(parser)
    parser.add_argument(
        "--sparks", default="500,4000", metavar="N,N…", help="stream densities, sparks a second (default: 500,4000)"
    )
    parser.add_argument(
        "--headroom",
        type=float,
        default=0.3,
        metavar="F",
        help="share of the processor kept for everything else (default: 0.3)",
    )
    parser.add_argument("--seconds", type=float, default=1.0, metavar="F", help="time spent on each cell (default: 1)")
    parser.add_argument("--json", action="store_true", help="one JSON object")


def run(args: argparse.Namespace) -> int:
    """Measure and advise; 1 when the station's own picture size is not sustained at its rate."""
    settings, _ = load_settings(args)
    sparks = _densities(args.sparks)
    for name, value, low, high in (("--headroom", args.headroom, 0.0, 0.9), ("--seconds", args.seconds, 0.01, 600.0)):
        if not (math.isfinite(value) and low <= value <= high):
            raise SettingsError(f"{name} {value:g}: allowed is a number from {low:g} to {high:g}")
    own = settings.sight_optics()
    cells = []
    for optics in [own, *_other_sizes(own)]:
        for density in sparks:
            print(f"pace: {optics.width_px} x {optics.height_px}, {density:g} sparks/s", file=sys.stderr)
            cells.append(measure_cell(optics, density, settings, seconds=args.seconds, headroom=args.headroom))
    mine = [cell for cell in cells if (cell.width_px, cell.height_px) == (own.width_px, own.height_px)]
    worst = min(mine, key=lambda cell: cell.sustained_fps)
    advice = advise(worst, own)
    if args.json:
        print(json.dumps({"fps": own.fps, "cells": [asdict(cell) for cell in cells], "advice": list(advice)}))
    else:
        _print_table(cells, own, advice)
    return 0 if worst.enough else 1


def measure_cell(optics: Optics, sparks_per_s: float, settings: Settings, *, seconds: float, headroom: float) -> Cell:
    """Time sight and figures on simulated pictures of one size and density."""
    stream = Stream(optics, find_steel(STEEL), rng=np.random.default_rng(SEED), sparks_per_s=sparks_per_s)
    pictures = [stream.frame()[0] for _ in range(PICTURES)]
    sight, meter = Sight(optics), BarMeter(settings.figures, optics)
    times: list[float] = []
    streaks = 0
    end = time.perf_counter() + seconds
    for index, picture in _round(pictures):
        begun = time.perf_counter()
        if index >= 2 * PICTURES and begun > end:
            break
        detections = sight.look(picture)
        meter.update(detections, t_s=index / optics.fps)
        if index >= PICTURES:  # the first round warms caches and the background
            times.append(time.perf_counter() - begun)
            streaks += len(detections.streaks)
    slow = float(np.quantile(times, SLOW_SHARE))
    sustained = (1.0 - headroom) / slow
    return Cell(
        width_px=optics.width_px,
        height_px=optics.height_px,
        sparks_per_s=sparks_per_s,
        streaks=streaks / len(times),
        median_ms=1e3 * float(np.median(times)),
        slow_ms=1e3 * slow,
        sustained_fps=sustained,
        enough=sustained >= optics.fps,
    )


def advise(worst: Cell, optics: Optics) -> tuple[str, ...]:
    """What to change when the station's rate is not sustained. Cost is taken to go with the number of pixels."""
    asked = optics.fps
    if worst.enough:
        return (f"{asked:g} frames/s are sustained at {worst.width_px} x {worst.height_px}",)
    share = worst.sustained_fps / asked
    width, height = optics.width_px, optics.height_px
    remedies = [f"{asked:g} frames/s are not sustained at {width} x {height}: {worst.sustained_fps:.0f} are"]
    remedies.append(f"rate: set optics.fps (and the camera) to {max(1, math.floor(worst.sustained_fps))} or less")
    rows = math.floor(height * share / 8.0) * 8
    if rows >= LEAST_SIDE_PX:
        remedies.append(f"region: set source.region_px to {width} x {rows} px about the stream, or less")
    binning = math.ceil(math.sqrt(1.0 / share))
    if 2 <= binning <= 8 and min(width, height) // binning >= LEAST_SIDE_PX:
        finer = optics.mm_per_px * binning
        remedies.append(f"binning: set source.binning to {binning}; pixels then are {finer:g} mm")
    if native.LIBRARY is None:
        remedies.append(f"compiler: the sight runs its Python forms, at half the speed: {native.WHY_NOT}")
    return tuple(remedies)


def _densities(text: str) -> tuple[float, ...]:
    try:
        values = tuple(float(part) for part in text.split(","))
    except ValueError:
        values = ()
    if not values or not all(math.isfinite(value) and 0.0 <= value <= 1e5 for value in values):
        raise SettingsError(f"--sparks {text}: numbers from 0 to 100000, separated by commas, are needed")
    return values


def _other_sizes(own: Optics) -> list[Optics]:
    """The same view on other numbers of pixels."""
    return [
        replace(
            own,
            width_px=width,
            height_px=height,
            mm_per_px=own.mm_per_px * own.width_px / width,
            contact_px=(own.contact_px[0] * width / own.width_px, own.contact_px[1] * height / own.height_px),
        )
        for width, height in SIZES_PX
        if (width, height) != (own.width_px, own.height_px)
    ]


def _round(pictures: list[NDArray[np.uint8]]) -> Iterator[tuple[int, NDArray[np.uint8]]]:
    index = 0
    while True:
        yield index, pictures[index % len(pictures)]
        index += 1


def _print_table(cells: list[Cell], own: Optics, advice: tuple[str, ...]) -> None:
    print("picture      sparks/s  streaks  median ms  95 % ms  sustained frames/s")
    for cell in cells:
        mark = "" if (cell.width_px, cell.height_px) != (own.width_px, own.height_px) else " this station"
        print(
            f"{cell.width_px:5d} x {cell.height_px:<5d}{cell.sparks_per_s:8.0f}{cell.streaks:9.1f}"
            f"{cell.median_ms:11.2f}{cell.slow_ms:9.2f}{cell.sustained_fps:11.0f}{mark}"
        )
    for line in advice:
        print(line)
