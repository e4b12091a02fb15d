"""Learns the weights by which steps left alone are judged, from both simulations with varied rendering.

``python -m tests.bench.learn_streaks`` writes ``edgewatch/sight/lone_weights.py`` and prints how well lines of scenes
kept apart are told. Seeds: see ``_shots``; none of them is used by a benchmark or a test.
"""

from __future__ import annotations

import argparse
import math
from collections.abc import Iterator
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any
from unittest import mock

import cv2
import numpy as np
from numpy.typing import NDArray

from edgewatch.rehearsal.camera import CameraModel
from edgewatch.rehearsal.scene import Stream as RehearsalStream
from edgewatch.rehearsal.steel import find_steel
from edgewatch.sight import Sight, native
from edgewatch.sight import listing as listing_module
from edgewatch.sight import lone as lone_module
from edgewatch.sight.glow import Sorted, sort_lines
from edgewatch.sight.lone import Lone
from edgewatch.sight.optics import Optics
from tests.bench.learn_bursts import Adam, Floats, batches, best_f1, probability, start
from tests.scenes import Look, Scene, Stream
from tests.scoring import LEAST_LENGTH_PX, LEAST_SNR, far, match_streaks, middles

FRAMES = 8
UNITS = 24

Array = NDArray[np.float64]


def _shots(kind: str, seed: int) -> Iterator[tuple[Optics, NDArray[np.uint8], Array]]:
    """Pictures and their streaks of one scene: ``r`` rehearsal, ``m`` the other simulation."""
    rng = np.random.default_rng([79, seed, ord(kind)])
    exposure_ms, fps = [(2.5, 200.0), (2.5, 200.0), (8.0, 60.0), (0.9, 1000.0), (4.0, 120.0)][int(rng.integers(5))]
    degrees = float(rng.choice([0.0, rng.uniform(-180.0, 180.0)]))
    c, s = math.cos(math.radians(degrees)), math.sin(math.radians(degrees))
    optics = Optics(
        width_px=640,
        height_px=400,
        mm_per_px=float(rng.choice([0.5, 0.8, 1.0, 1.0, 1.4])),
        contact_px=(320 - c * 300, 200 - s * 180),
        direction_deg=degrees,
        exposure_ms=exposure_ms,
        fps=fps,
    )
    hazard = float(np.exp(rng.uniform(np.log(0.05), np.log(4.0))))
    sparks = float(np.exp(rng.uniform(np.log(600), np.log(8000))))
    if kind == "r":
        steel = replace(find_steel(str(rng.choice(["C15", "C45", "C80", "42CrMo4"]))).varied(rng), hazard_per_m=hazard)
        camera = CameraModel(jpeg_quality=int(rng.choice([0, 0, 0, 75])))
        camera = camera.varied(rng) if rng.uniform() < 0.6 else camera
        source = RehearsalStream(optics, steel, rng=rng, sparks_per_s=sparks, camera=camera)
        for _ in range(FRAMES):
            picture, truth = source.frame()
            yield optics, picture, _scored(truth.streaks.astype(np.float64), truth.streak_snr)
        return
    look = Look(
        spread_px=float(rng.uniform(0.65, 1.5)),
        noise_dn=float(rng.uniform(1.0, 4.0)),
        gamma=float(rng.choice([1.0, 1.0, 0.6])),
        gain=float(rng.uniform(0.4, 1.8)),
        per_length=bool(rng.integers(2)),
        jpeg=int(rng.choice([0, 0, 0, 75])),
        shake_px=float(rng.choice([0.0, 0.0, 1.5])),
    )
    stream = Stream(
        hazard_per_m=hazard,
        sparks_per_s=sparks,
        kick=float(rng.uniform(0.25, 1.2)),
        fan_deg=float(rng.uniform(6, 14)),
        brightness=float(rng.uniform(40, 120)),
        arms=(3, int(rng.integers(5, 10))),
    )
    for picture, own in Scene(optics, stream, look, int(rng.integers(2**31)), (FRAMES + 0.5) / fps):
        yield optics, picture, _scored(own.streaks, own.snr)


def _scored(lines: Array, snr: NDArray[np.floating[Any]]) -> Array:
    length = np.hypot(*(lines[:, 2:] - lines[:, :2]).T)
    kept: Array = lines[(snr >= LEAST_SNR) & (length > LEAST_LENGTH_PX)]
    return kept


@dataclass
class _Listener:
    """Lists every line of which one end is seen, and keeps what was made of it."""

    lone: list[Lone] = field(default_factory=list)
    sorted: list[Sorted] = field(default_factory=list)
    whole: int = 0

    def pick(self, lone: Lone) -> NDArray[np.int64]:
        self.lone.append(lone)
        return np.arange(len(lone.begin))

    def sort(self, *args: Any) -> Sorted:
        self.whole = int(args[2].sum())
        self.sorted.append(sort_lines(*args))
        return self.sorted[-1]


def collect(kind: str, seeds: range) -> tuple[Floats, NDArray[np.bool_]]:
    """Marks (N, F) of lines with one end seen that no burst claims, and whether each is a streak that is not yet found:
    of all ways to give every streak one line at most that by which most are found.
    """
    marks, rights = [], []
    for seed in seeds:
        sight: Sight | None = None
        for optics, picture, truth in _shots(kind, seed):
            sight = sight or Sight(optics)
            heard = _Listener()
            with (
                mock.patch.object(native, "LIBRARY", None),  # the compiled form hands nothing over on its way
                mock.patch.object(lone_module, "pick_lines", heard.pick),
                mock.patch.object(listing_module, "sort_lines", heard.sort),
            ):
                sight.look(picture)
            if not heard.lone:
                continue
            lone, made = heard.lone[0], heard.sorted[0]
            lines = np.concatenate([made.begin, made.end], axis=1)
            count, last = heard.whole, heard.whole + len(lone.begin)
            found = {k for k, _ in match_streaks(truth, lines[:count][made.streak[:count]])}
            rest = truth[[k for k in range(len(truth)) if k not in found]]
            own, live = lines[count:last], made.streak[count:last]
            right, listed = np.zeros(len(own), np.bool_), np.flatnonzero(live)
            right[[listed[k] for _, k in match_streaks(rest, own[listed])]] = True
            kept = live & far(middles(own), optics.contact_px)
            marks.append(lone.marks[kept])
            rights.append(right[kept])
    return np.concatenate(marks), np.concatenate(rights)


def learn(marks: Floats, right: NDArray[np.bool_], rounds: int, seed: int = 3) -> list[Floats]:
    """The perceptron; its input is standardised while learning, and that is folded into its weights."""
    rng = np.random.default_rng(seed)
    mean, scale = marks.mean(axis=0), marks.std(axis=0) + np.float32(1e-3)
    p = start(rng, (marks.shape[1], UNITS), (UNITS, 1))
    adam = Adam(p, decay=0.001)
    for rows, rate in batches(len(right), rounds, rng):
        x = (marks[rows] - mean) / scale
        z = x @ p[0] + p[1]
        hidden = np.maximum(z, 0)
        d = (probability(hidden @ p[2] + p[3]) - right[rows, None]) / len(rows)
        back = (d @ p[2].T) * (z > 0)
        adam.step([x.T @ back, back.sum(axis=0), hidden.T @ d, d.sum(axis=0)], rate)
    weights = p[0] / scale[:, None]
    return [weights, p[1] - mean @ weights, p[2][:, 0], p[3]]


TEMPLATE = '''"""Weights for steps left alone. Written by ``tests/bench/learn_streaks.py``; not edited by hand."""

import numpy as np

'''
ARRAY = """{name} = np.asarray(
    {values},
    np.float32,
)
"""


def write(weights: list[Floats], path: Path) -> None:
    """Write the module that holds the weights."""

    def row(values: Floats) -> str:
        return "(" + ", ".join(f"{v:.3g}" for v in values) + ",)"[len(values) > 1 :]

    text = TEMPLATE
    for name, values in zip(("HIDDEN", "HIDDEN_BIAS", "OUTPUT", "OUTPUT_BIAS"), weights, strict=True):
        rows = "(\n" + "".join(f"        {row(one)},\n" for one in values) + "    )" if values.ndim > 1 else row(values)
        text += ARRAY.format(name=name, values=rows)
    path.write_text(text, encoding="ascii")


def main() -> None:
    """Collect, learn, report, write."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0] if __doc__ else None)
    parser.add_argument("--scenes", type=int, default=300, help="scenes of each simulation to learn from")
    parser.add_argument("--rounds", type=int, default=40, help="rounds through all lines")
    parser.add_argument("--out", type=Path, default=Path("edgewatch/sight/lone_weights.py"))
    args = parser.parse_args()
    cv2.setNumThreads(1)
    parts = [collect(kind, range(args.scenes)) for kind in "rm"]
    marks, right = (np.concatenate(part) for part in zip(*parts, strict=True))
    print(f"{len(right)} lines, {int(right.sum())} streaks", flush=True)
    weights = learn(marks, right, args.rounds)
    write(weights, args.out)
    for kind in "rm":
        marks, right = collect(kind, range(20_000, 20_000 + max(2, args.scenes // 10)))
        p = probability(np.maximum(marks @ weights[0] + weights[1], 0) @ weights[2] + weights[3])
        f1, threshold = best_f1(p, right)
        print(f"{kind}: {len(p)} lines apart, {right.sum()} streaks; F1 {f1:.3f} at {threshold:.2f}", flush=True)


if __name__ == "__main__":
    main()
