"""Learns the weights of the burst perceptron from both simulations with varied rendering.

``python -m tests.bench.learn_bursts`` writes ``edgewatch/sight/burst_weights.py`` and prints how well it does on
scenes kept apart, and how well weights learnt from one simulation do on the other. Seeds: see ``_scene``; none of them
is used by a benchmark or a test.
"""

from __future__ import annotations

import argparse
import base64
import math
import zlib
from collections.abc import Iterator
from pathlib import Path

import cv2
import numpy as np
from numpy.typing import NDArray

from edgewatch.rehearsal.camera import CameraModel
from edgewatch.rehearsal.scene import Stream as RehearsalStream
from edgewatch.rehearsal.steel import find_steel
from edgewatch.sight.background import Background
from edgewatch.sight.bursts import RING_DIRECTIONS, RING_RADII_PX, find_candidates, read_patches
from edgewatch.sight.optics import Optics
from edgewatch.sight.ridges import NOISE_GAIN, find_ridges
from edgewatch.sight.segments import fit_segments, link_ridges
from tests.scenes import Look, Scene, Stream, crossing_lines
from tests.scoring import far

FRAMES = 6
HIDDEN_UNITS = 48
RIGHT_PX, DOUBTFUL_PX = 5.0, 9.0
"""A candidate this near to a burst is one; up to the second distance it is left out."""
DRAWN_S, HARDLY_DRAWN_S = 0.35e-3, 0.3e-3

Array = NDArray[np.float64]


def _optics(rng: np.random.Generator) -> Optics:
    exposure_ms, fps = [(2.5, 200.0), (2.5, 200.0), (8.0, 60.0), (0.9, 1000.0), (4.0, 120.0)][int(rng.integers(5))]
    degrees = float(rng.uniform(-180, 180))
    c, s = math.cos(math.radians(degrees)), math.sin(math.radians(degrees))
    return Optics(
        width_px=640,
        height_px=400,
        mm_per_px=float(rng.choice([0.5, 0.8, 1.0, 1.0, 1.4])),
        contact_px=(320 - c * 280, 200 - s * 180),
        direction_deg=degrees,
        exposure_ms=exposure_ms,
        fps=fps,
    )


def _scene(kind: str, seed: int) -> Iterator[tuple[NDArray[np.uint8], Array, Array, Optics]]:
    """Pictures, positions of glowing bursts, and for how long their third arm drew (s)."""
    rng = np.random.default_rng([77, seed, ord(kind)])
    optics = _optics(rng)
    hazard = float(np.exp(rng.uniform(np.log(0.03), np.log(4.0))))
    sparks = float(np.exp(rng.uniform(np.log(600), np.log(6000))))
    if kind == "r":
        steel = find_steel(str(rng.choice(["C15", "C45", "C80"]))).varied(rng)
        camera = CameraModel().varied(rng) if rng.uniform() < 0.6 else CameraModel()
        stream = RehearsalStream(optics, steel, rng=rng, sparks_per_s=sparks, camera=camera)
        for _ in range(FRAMES):
            picture, truth = stream.frame()
            yield picture, truth.bursts.astype(np.float64).reshape(-1, 2), truth.drew_ms * 1e-3, optics
        return
    look = Look(
        spread_px=float(rng.uniform(0.7, 1.3)),
        noise_dn=float(rng.uniform(1.0, 4.0)),
        gamma=float(rng.choice([1.0, 1.0, 0.6])),
        gain=float(rng.uniform(0.6, 1.8)),
        per_length=bool(rng.integers(2)),
        jpeg=int(rng.choice([0, 0, 0, 75])),
        shake_px=float(rng.choice([0.0, 0.0, 1.5])),
    )
    if kind == "x":
        for _ in range(FRAMES):
            yield crossing_lines(optics, look, rng), np.zeros((0, 2)), np.zeros(0), optics
        return
    stream2 = Stream(
        hazard_per_m=hazard,
        sparks_per_s=sparks,
        kick=float(rng.uniform(0.3, 1.2)),
        fan_deg=float(rng.uniform(6, 14)),
        arm_glow_s=float(rng.uniform(0.0012, 0.003)),
        brightness=float(rng.uniform(40, 120)),
        carries_on=float(rng.uniform(0, 0.6)),
        arms=(3, int(rng.integers(5, 10))),
    )
    for picture, truth2 in Scene(optics, stream2, look, int(rng.integers(2**31)), (FRAMES + 0.5) / optics.fps):
        yield picture, truth2.glowing, truth2.drew_s, optics


def collect(kinds: str, seeds: range) -> tuple[NDArray[np.float32], NDArray[np.bool_]]:
    """Descriptions of candidates and whether each is a burst."""
    patches, rights = [np.zeros((0, len(RING_RADII_PX) * RING_DIRECTIONS), np.float32)], [np.zeros(0, np.bool_)]
    for kind in kinds:
        for seed in seeds:
            background, scratch = None, None
            for picture, bursts, drew_s, optics in _scene(kind, seed):
                if background is None or scratch is None:
                    background = Background(period_s=optics.period_s)
                    scratch = np.full(picture.size, -1, np.int32)
                excess = background.excess(picture)
                noise = background.noise_dn * NOISE_GAIN
                ridges = find_ridges(excess, background.noise_dn)
                pieces = fit_segments(ridges, link_ridges(ridges, scratch))
                at = find_candidates(pieces, ridges)
                at = at[far(at, optics.contact_px)]
                gap = np.hypot(*(at[:, None] - bursts[None]).transpose(2, 0, 1))
                right = ((gap < RIGHT_PX) & (drew_s >= DRAWN_S)).any(axis=1)
                doubtful = ~right & ((gap < DOUBTFUL_PX) & (drew_s >= HARDLY_DRAWN_S)).any(axis=1)
                patches.append(read_patches(at, ridges.blurred, noise, optics.contact_px)[~doubtful])
                rights.append(right[~doubtful])
    return np.concatenate(patches), np.concatenate(rights)


def mirrored(patches: NDArray[np.float32]) -> NDArray[np.float32]:
    """The same descriptions seen in a mirror along the stream."""
    rings = patches.reshape(len(patches), len(RING_RADII_PX), RING_DIRECTIONS)
    return np.roll(rings[:, :, ::-1], 1, axis=2).reshape(patches.shape)


def learn(
    patches: NDArray[np.float32], right: NDArray[np.bool_], *, seed: int = 1, rounds: int = 15, decay: float = 1e-4
) -> tuple[NDArray[np.float32], NDArray[np.float32], NDArray[np.float32], np.float32]:
    """Adam (Kingma & Ba 2015) on the cross entropy with decay of weights; inputs are standardised, then folded in."""
    rng = np.random.default_rng(seed)
    x = np.concatenate([patches, mirrored(patches)])
    y = np.concatenate([right, right]).astype(np.float32)
    mean, scale = x.mean(axis=0), x.std(axis=0) + 0.1
    x = (x - mean) / scale
    shapes = [(x.shape[1], HIDDEN_UNITS), (HIDDEN_UNITS,), (HIDDEN_UNITS,), (1,)]
    p = [
        (rng.standard_normal(s) * (1.0 / math.sqrt(s[0]) if i % 2 == 0 else 0.0)).astype(np.float32)
        for i, s in enumerate(shapes)
    ]
    first = [np.zeros_like(q) for q in p]
    second = [np.zeros_like(q) for q in p]
    step, batch = 0, 256
    for turn in range(rounds):
        rate = 2e-3 * 0.5 * (1.0 + math.cos(math.pi * turn / rounds))
        order = rng.permutation(len(x))
        for k in range(0, len(x) - batch + 1, batch):
            rows = order[k : k + batch]
            a = x[rows]
            z = a @ p[0] + p[1]
            h = np.maximum(z, 0)
            out = 1.0 / (1.0 + np.exp(-np.clip(h @ p[2] + p[3], -30, 30)))
            d = (out - y[rows]) / batch
            dh = d[:, None] * p[2][None] * (z > 0)
            grads = [a.T @ dh + decay * p[0], dh.sum(axis=0), h.T @ d + decay * p[2], np.array([d.sum()])]
            step += 1
            for i, g in enumerate(grads):
                first[i] += 0.1 * (g - first[i])
                second[i] += 0.001 * (g * g - second[i])
                p[i] -= (rate * (first[i] / (1 - 0.9**step)) / (np.sqrt(second[i] / (1 - 0.999**step)) + 1e-8)).astype(
                    np.float32
                )
    hidden = p[0] / scale[:, None]
    return hidden, p[1] - mean @ hidden, p[2], np.float32(p[3][0])


def probability(weights: tuple, patches: NDArray[np.float32]) -> Array:  # type: ignore[type-arg]
    """What the perceptron says."""
    hidden = np.maximum(patches @ weights[0] + weights[1], 0)
    return np.asarray(1.0 / (1.0 + np.exp(-np.clip(hidden @ weights[2] + weights[3], -30, 30))))


def best_f1(p: Array, right: NDArray[np.bool_]) -> tuple[float, float]:
    """Greatest F1 over thresholds, and its threshold."""
    return max(
        (2 * float((right & (p > t)).sum()) / max(1, int((p > t).sum() + right.sum())), float(t))
        for t in np.linspace(0.1, 0.9, 33)
    )


TEMPLATE = '''"""Weights of the burst perceptron. Written by ``tests/bench/learn_bursts.py``; not edited by hand."""

import base64
import zlib

import numpy as np
from numpy.typing import NDArray

_PACKED = (
{lines}
)
_FLAT: NDArray[np.float32] = np.frombuffer(zlib.decompress(base64.b85decode("".join(_PACKED))), dtype="<f2").astype(
    np.float32
)
_INPUTS, _UNITS = {inputs}, {units}
HIDDEN = _FLAT[: _INPUTS * _UNITS].reshape(_INPUTS, _UNITS)
HIDDEN_BIAS = _FLAT[_INPUTS * _UNITS : (_INPUTS + 1) * _UNITS]
OUTPUT = _FLAT[(_INPUTS + 1) * _UNITS : (_INPUTS + 2) * _UNITS]
OUTPUT_BIAS = float(_FLAT[-1])
'''


def write(weights: tuple, path: Path) -> None:  # type: ignore[type-arg]
    """Write the module that holds the weights."""
    flat = np.concatenate([np.ravel(w) for w in weights]).astype("<f2").tobytes()
    text = base64.b85encode(zlib.compress(flat, 9)).decode("ascii")
    lines = "\n".join(f'    "{text[k : k + 110]}"' for k in range(0, len(text), 110))
    path.write_text(
        TEMPLATE.format(lines=lines, inputs=weights[0].shape[0], units=weights[0].shape[1]), encoding="ascii"
    )


def main() -> None:
    """Collect, learn, report, write."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0] if __doc__ else None)
    parser.add_argument(
        "--scenes",
        type=int,
        default=180,
        help="scenes of the rehearsal to learn from; of the other simulation five sixths of that",
    )
    parser.add_argument("--out", type=Path, default=Path("edgewatch/sight/burst_weights.py"))
    args = parser.parse_args()
    cv2.setNumThreads(1)
    number = {"r": args.scenes, "m": args.scenes * 5 // 6, "x": args.scenes * 2 // 9}
    own = {kind: collect(kind, range(max(2, number[kind]))) for kind in "rmx"}
    apart = {kind: collect(kind, range(10_000, 10_000 + max(2, number[kind] // 6))) for kind in "rm"}
    for kinds in ("r", "m", "rm"):
        weights = learn(*(np.concatenate([own[k][i] for k in kinds + "x"]) for i in (0, 1)))  # type: ignore[arg-type]
        for k in "rm":
            f1, threshold = best_f1(probability(weights, apart[k][0]), apart[k][1])
            print(
                f"learnt on {kinds:2s}, {len(own[k][1])} candidates; on {k}: F1 {f1:.3f} at {threshold:.2f}", flush=True
            )
    write(weights, args.out)


if __name__ == "__main__":
    main()
