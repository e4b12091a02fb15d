"""Learns the weights of the burst net from both simulations with varied rendering.

``python -m tests.bench.learn_bursts`` writes ``edgewatch/sight/burst_weights.py`` and prints how well candidates of
scenes kept apart are told. Seeds: see ``_scene``; none of them is used by a benchmark or a test.
"""

from __future__ import annotations

import argparse
import base64
import math
import zlib
from collections.abc import Iterator
from dataclasses import dataclass, replace
from pathlib import Path

import cv2
import numpy as np
from numpy.typing import NDArray

from edgewatch.rehearsal.camera import CameraModel
from edgewatch.rehearsal.scene import Stream as RehearsalStream
from edgewatch.rehearsal.steel import find_steel
from edgewatch.sight.background import Background
from edgewatch.sight.bursts import (
    FIRST_REACH,
    RING_DIRECTIONS,
    RING_RADII_PX,
    SECOND_REACH,
    SECOND_STEP,
    SIFT_LEAST,
    find_candidates,
    read_patches,
    windows,
)
from edgewatch.sight.optics import Optics
from edgewatch.sight.ridges import NOISE_GAIN, find_ridges
from edgewatch.sight.segments import fit_segments, link_ridges
from tests.scenes import Look, Scene, Stream, crossing_lines, loose_dashes
from tests.scoring import far

FRAMES = 6
SIFT_UNITS = 8
FIRST_UNITS, SECOND_UNITS, HIDDEN_UNITS = 24, 24, 48
RIGHT_PX, DOUBTFUL_PX = 10.0, 14.0
"""A candidate this near to a burst is one, and shall be moved there; up to the second distance it is left out."""
DRAWN_S, HARDLY_DRAWN_S = 0.35e-3, 0.3e-3
SHIFT_WEIGHT, LATE_WEIGHT = 0.02, 0.1
"""Weights of the two lesser tasks beside the cross entropy of the main one."""
KEPT_SHARE = 0.9
"""Share of hidden units kept in a step (Srivastava et al. 2014)."""

Array = NDArray[np.float64]
Floats = NDArray[np.float32]


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


@dataclass(frozen=True, kw_only=True)
class Shot:
    """A picture and its glowing bursts: ``at`` (K, 2) px, ``drew_s`` (K,) for how long the third arm drew, ``late``."""

    picture: NDArray[np.uint8]
    at: Array
    drew_s: Array
    late: NDArray[np.bool_]
    optics: Optics


def _scene(kind: str, seed: int) -> Iterator[Shot]:
    """Pictures of one scene: ``r`` rehearsal, ``m`` the other simulation, ``x`` crossing lines, ``d`` loose dashes and
    spots."""
    rng = np.random.default_rng([78, seed, ord(kind)])
    optics = _optics(rng)
    hazard = float(np.exp(rng.uniform(np.log(0.05), np.log(4.0))))
    sparks = float(np.exp(rng.uniform(np.log(600), np.log(6500))))
    if kind == "r":
        steel = find_steel(str(rng.choice(["C15", "C45", "C80", "42CrMo4"]))).varied(rng)
        if rng.uniform() < 0.5:
            steel = replace(steel, hazard_per_m=hazard)
        camera = CameraModel().varied(rng) if rng.uniform() < 0.6 else CameraModel()
        source = RehearsalStream(optics, steel, rng=rng, sparks_per_s=sparks, camera=camera)
        for _ in range(FRAMES):
            picture, truth = source.frame()
            at = truth.bursts.astype(np.float64).reshape(-1, 2)
            yield Shot(picture=picture, at=at, drew_s=truth.drew_ms * 1e-3, late=truth.late, optics=optics)
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
    if kind in "xd":
        for _ in range(FRAMES):
            if kind == "d":
                picture = loose_dashes(optics, look, rng)
            else:  # at random; all turned by one angle; three at 60 degrees make a star of six even arms, the hardest
                angle = (math.nan, float(rng.uniform(5, 90)), float(rng.normal(60, 6)))[int(rng.integers(3))]
                picture = crossing_lines(optics, look, rng, angle_deg=angle)
            none = np.zeros(0)
            yield Shot(picture=picture, at=np.zeros((0, 2)), drew_s=none, late=none.astype(np.bool_), optics=optics)
        return
    stream = Stream(
        hazard_per_m=hazard,
        sparks_per_s=sparks,
        kick=float(rng.uniform(0.25, 1.2)),
        fan_deg=float(rng.uniform(6, 14)),
        arm_glow_s=float(rng.uniform(0.001, 0.003)),
        brightness=float(rng.uniform(40, 120)),
        carries_on=float(rng.uniform(0, 0.6)),
        arms=(3, int(rng.integers(5, 10))),
    )
    scene = Scene(optics, stream, look, int(rng.integers(2**31)), (FRAMES + 0.5) / optics.fps)
    for picture, own in scene:
        yield Shot(picture=picture, at=own.glowing, drew_s=own.drew_s, late=own.glowing_late, optics=optics)


@dataclass(frozen=True, kw_only=True)
class Lessons:
    """Candidates, N of them: ``patches`` float16 (N, F); ``right`` bool, whether each is a burst; ``shift`` float32
    (N, 2), where it is along the stream and across; ``late`` bool.
    """

    patches: NDArray[np.float16]
    right: NDArray[np.bool_]
    shift: Floats
    late: NDArray[np.bool_]


def collect(kind: str, seeds: range) -> Lessons:
    """Candidates of scenes, those about which the truth is in doubt left out."""
    patches, rights, shifts, lates = [], [], [], []
    for seed in seeds:
        background, scratch = None, np.zeros(0, np.int32)
        for shot in _scene(kind, seed):
            optics = shot.optics
            if background is None:
                background, scratch = Background(period_s=optics.period_s), np.full(shot.picture.size, -1, np.int32)
            excess = background.excess(shot.picture)
            ridges = find_ridges(excess, background.noise_dn)
            pieces = fit_segments(ridges, link_ridges(ridges, scratch))
            at = find_candidates(pieces, ridges)
            at = at[far(at, optics.contact_px)]
            right, doubtful, nearest, gap = _compare(at, shot)
            kept = ~doubtful
            read = read_patches(at[kept], ridges.blurred, background.noise_dn * NOISE_GAIN, optics.contact_px)
            away = at - np.asarray(optics.contact_px)
            away /= np.hypot(away[:, 0], away[:, 1])[:, None]
            along = (gap * away).sum(axis=1)
            across = gap[:, 1] * away[:, 0] - gap[:, 0] * away[:, 1]
            patches.append(read.astype(np.float16))
            rights.append(right[kept])
            shifts.append(np.stack([along, across], axis=1)[kept].astype(np.float32))
            lates.append((shot.late[nearest] if len(shot.late) else np.zeros(len(at), np.bool_))[kept])
    return Lessons(
        patches=np.concatenate(patches),
        right=np.concatenate(rights),
        shift=np.concatenate(shifts),
        late=np.concatenate(lates),
    )


def _compare(at: Array, shot: Shot) -> tuple[NDArray[np.bool_], NDArray[np.bool_], NDArray[np.int64], Array]:
    """Of each candidate: whether it is a burst, whether that is in doubt, which burst, and the way there (px)."""
    none = np.zeros(len(at), np.bool_)
    if not len(at) or not len(shot.at):
        return none, none, np.zeros(len(at), np.int64), np.zeros((len(at), 2))
    way = shot.at[None] - at[:, None]
    distance = np.hypot(way[..., 0], way[..., 1])
    drawn = np.where(shot.drew_s[None] >= DRAWN_S, distance, np.inf)
    nearest = np.argmin(drawn, axis=1)
    rows = np.arange(len(at))
    right = drawn[rows, nearest] < RIGHT_PX
    hardly = np.where(shot.drew_s[None] >= HARDLY_DRAWN_S, distance, np.inf).min(axis=1)
    return right, ~right & (hardly < DOUBTFUL_PX), nearest, way[rows, nearest]


def joined(lessons: list[Lessons]) -> Lessons:
    """All of them."""
    return Lessons(
        patches=np.concatenate([one.patches for one in lessons]),
        right=np.concatenate([one.right for one in lessons]),
        shift=np.concatenate([one.shift for one in lessons]),
        late=np.concatenate([one.late for one in lessons]),
    )


def mirrored(patches: Floats) -> Floats:
    """The same descriptions seen in a mirror along the stream."""
    rings = patches.reshape(len(patches), len(RING_RADII_PX), RING_DIRECTIONS)
    return np.roll(rings[:, :, ::-1], 1, axis=2).reshape(patches.shape)


class Adam:
    """Kingma & Ba 2015, with decay of weights apart (Loshchilov & Hutter 2019); changes its parameters in place."""

    def __init__(self, parameters: list[Floats], decay: float) -> None:
        self.parameters, self.decay = parameters, decay
        self._first = [np.zeros_like(p) for p in parameters]
        self._second = [np.zeros_like(p) for p in parameters]
        self._step = 0

    def step(self, gradients: list[Floats], rate: float) -> None:
        """One step down."""
        self._step += 1
        for p, m, v, g in zip(self.parameters, self._first, self._second, gradients, strict=True):
            m += 0.1 * (g - m)
            v += 0.001 * (g * g - v)
            p -= rate * self.decay * p
            p -= rate * (m / (1 - 0.9**self._step)) / (np.sqrt(v / (1 - 0.999**self._step)) + 1e-8)


def start(rng: np.random.Generator, *shapes: tuple[int, int]) -> list[Floats]:
    """Weights (He et al. 2015) and zero biases of layers."""
    layers: list[Floats] = []
    for shape in shapes:
        layers.append((rng.standard_normal(shape) * math.sqrt(2.0 / shape[0])).astype(np.float32))
        layers.append(np.zeros(shape[1], np.float32))
    return layers


def batches(
    count: int, rounds: int, rng: np.random.Generator, size: int = 512
) -> Iterator[tuple[NDArray[np.int64], float]]:
    """Rows of each batch and the learning rate: rising over a tenth of the way, then falling as a cosine."""
    steps = rounds * (count // size)
    step = 0
    for _ in range(rounds):
        order = rng.permutation(count)
        for k in range(count // size):
            part = step / steps
            rate = 3e-3 * (part / 0.1 if part < 0.1 else 0.5 * (1.0 + math.cos(math.pi * (part - 0.1) / 0.9)))
            step += 1
            yield np.sort(order[k * size : (k + 1) * size]), rate


def probability(logit: Floats) -> Floats:
    """Logistic function."""
    return np.asarray(1.0 / (1.0 + np.exp(-np.clip(logit, -30, 30))), np.float32)


def learn_sieve(lessons: Lessons, rounds: int, seed: int = 1) -> list[Floats]:
    """The small perceptron; its input is standardised while learning, and that is folded into its weights."""
    rng = np.random.default_rng(seed)
    mean, scale = _standard(lessons.patches, axis=0)
    p = start(rng, (lessons.patches.shape[1], SIFT_UNITS), (SIFT_UNITS, 1))
    adam = Adam(p, decay=0.01)
    for rows, rate in batches(len(lessons.right), rounds, rng):
        x = (_drawn(lessons, rows, rng)[0] - mean) / scale
        z = x @ p[0] + p[1]
        hidden = np.maximum(z, 0)
        d = (probability(hidden @ p[2] + p[3]) - lessons.right[rows, None]) / len(rows)
        back = (d @ p[2].T) * (z > 0)
        adam.step([x.T @ back, back.sum(axis=0), hidden.T @ d, d.sum(axis=0)], rate)
    weights = p[0] / scale[:, None]
    return [weights, p[1] - mean @ weights, p[2], p[3]]


def _standard(patches: NDArray[np.float16], axis: int | tuple[int, ...]) -> tuple[Floats, Floats]:
    some = patches[:: max(1, len(patches) // 50_000)].astype(np.float32)
    if axis != 0:
        some = some.reshape(len(some), len(RING_RADII_PX), RING_DIRECTIONS)
    return some.mean(axis=axis), some.std(axis=axis) + np.float32(0.1)


def _drawn(lessons: Lessons, rows: NDArray[np.int64], rng: np.random.Generator) -> tuple[Floats, Floats]:
    """Patches and shifts of a batch, mirrored every other time."""
    x, shift = lessons.patches[rows].astype(np.float32), lessons.shift[rows]
    if rng.uniform() < 0.5:
        return mirrored(x), shift * np.array([1.0, -1.0], np.float32)
    return x, shift


def learn_net(lessons: Lessons, rounds: int, seed: int = 2) -> list[Floats]:
    """The net, by back-propagation; input standardised ring by ring, folded into the first layer."""
    rng = np.random.default_rng(seed)
    rings = len(RING_RADII_PX)
    mean, scale = _standard(lessons.patches, axis=(0, 2))
    taps_1, taps_2 = 2 * FIRST_REACH + 1, 2 * SECOND_REACH + 1
    places = RING_DIRECTIONS // SECOND_STEP
    p = start(
        rng,
        (taps_1 * rings, FIRST_UNITS),
        (taps_2 * FIRST_UNITS, SECOND_UNITS),
        (places * SECOND_UNITS, HIDDEN_UNITS),
        (HIDDEN_UNITS, 4),
    )
    adam = Adam(p, decay=0.01)
    for rows, rate in batches(len(lessons.right), rounds, rng):
        x, shift = _drawn(lessons, rows, rng)
        count = len(rows)
        x = (x.reshape(count, rings, RING_DIRECTIONS).transpose(0, 2, 1) - mean) / scale
        w1 = windows(x, FIRST_REACH, 1)
        z1 = w1 @ p[0] + p[1]
        w2 = windows(np.maximum(z1, 0).reshape(count, RING_DIRECTIONS, -1), SECOND_REACH, SECOND_STEP)
        z2 = w2 @ p[2] + p[3]
        a2 = np.maximum(z2, 0).reshape(count, -1)
        z3 = a2 @ p[4] + p[5]
        kept = (rng.random(z3.shape) < KEPT_SHARE) / np.float32(KEPT_SHARE)
        a3 = np.maximum(z3, 0) * kept
        d4 = _slopes(a3 @ p[6] + p[7], lessons.right[rows], shift, lessons.late[rows])
        d3 = (d4 @ p[6].T) * kept * (z3 > 0)
        d2 = (d3 @ p[4].T).reshape(z2.shape) * (z2 > 0)
        d1 = unwindowed((d2 @ p[2].T).reshape(count, places, taps_2, -1)).reshape(z1.shape) * (z1 > 0)
        adam.step(
            [
                *(w1.T @ d1, d1.sum(axis=0)),
                *(w2.T @ d2, d2.sum(axis=0)),
                *(a2.T @ d3, d3.sum(axis=0)),
                *(a3.T @ d4, d4.sum(axis=0)),
            ],
            rate,
        )
    first = p[0] / np.tile(scale, taps_1)[:, None]
    return [first, p[1] - np.tile(mean, taps_1) @ first, *p[2:]]


def _slopes(out: Floats, right: NDArray[np.bool_], shift: Floats, late: NDArray[np.bool_]) -> Floats:
    """Derivatives of the loss: cross entropies, and Huber's of the shift, the lesser tasks over bursts only."""
    d = np.zeros_like(out)
    d[:, 0] = (probability(out[:, 0]) - right) / len(out)
    number = max(1, int(right.sum()))
    d[right, 1:3] = SHIFT_WEIGHT * np.clip(out[right, 1:3] - shift[right], -1, 1) / (2 * number)
    d[right, 3] = LATE_WEIGHT * (probability(out[right, 3]) - late[right]) / number
    return d


def unwindowed(slopes: Floats) -> Floats:
    """What ``windows`` (reach 1) took apart, added up again: (N, places, 3, C) -> (N, directions, C)."""
    count, places, taps, channels = slopes.shape
    directions = places * SECOND_STEP
    closed = np.zeros((count, directions + 2 * SECOND_REACH, channels), np.float32)
    for k in range(taps):
        closed[:, k : k + directions : SECOND_STEP] += slopes[:, :, k]
    inner = closed[:, SECOND_REACH : SECOND_REACH + directions]
    inner[:, -SECOND_REACH:] += closed[:, :SECOND_REACH]
    inner[:, :SECOND_REACH] += closed[:, SECOND_REACH + directions :]
    return inner


def best_f1(p: Floats, right: NDArray[np.bool_]) -> tuple[float, float]:
    """Greatest F1 over thresholds, and its threshold."""
    return max(
        (2 * float((right & (p > t)).sum()) / max(1, int((p > t).sum() + right.sum())), float(t))
        for t in np.linspace(0.1, 0.9, 33)
    )


NAMES = ("SIFT", "SIFTED", "FIRST", "SECOND", "HIDDEN", "OUTPUT")
TEMPLATE = '''"""Weights of the burst net. Written by ``tests/bench/learn_bursts.py``; not edited by hand."""

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
'''


def write(weights: list[Floats], path: Path) -> None:
    """Write the module that holds the weights; arrays alternate with biases, in the order of ``NAMES``."""
    flat = np.concatenate([np.ravel(w) for w in weights]).astype("<f2").tobytes()
    text = base64.b85encode(zlib.compress(flat, 9)).decode("ascii")
    lines = "\n".join(f'    "{text[k : k + 110]}"' for k in range(0, len(text), 110))
    module, at = TEMPLATE.format(lines=lines), 0
    for name, matrix, bias in zip(NAMES, weights[::2], weights[1::2], strict=True):
        rows, columns = matrix.shape
        module += f"{name} = _FLAT[{at}:{at + matrix.size}].reshape({rows}, {columns})\n"
        at += matrix.size
        module += f"{name}_BIAS = _FLAT[{at}:{at + bias.size}]\n"
        at += bias.size
    path.write_text(module, encoding="ascii")


def judge(weights: list[Floats], patches: NDArray[np.float16]) -> tuple[Floats, Floats]:
    """Probabilities after sieve and net, as the station computes them."""
    sieve, net = [], []
    for k in range(0, len(patches), 4096):
        x = patches[k : k + 4096].astype(np.float32)
        sieve.append(probability(np.maximum(x @ weights[0] + weights[1], 0) @ weights[2] + weights[3])[:, 0])
        rings = x.reshape(len(x), len(RING_RADII_PX), RING_DIRECTIONS).transpose(0, 2, 1)
        first = np.maximum(windows(rings, FIRST_REACH, 1) @ weights[4] + weights[5], 0)
        first = first.reshape(len(x), RING_DIRECTIONS, -1)
        second = np.maximum(windows(first, SECOND_REACH, SECOND_STEP) @ weights[6] + weights[7], 0)
        hidden = np.maximum(second.reshape(len(x), -1) @ weights[8] + weights[9], 0)
        net.append(probability(hidden @ weights[10] + weights[11])[:, 0])
    return np.concatenate(sieve), np.concatenate(net)


def main() -> None:
    """Collect, learn, report, write."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0] if __doc__ else None)
    parser.add_argument("--scenes", type=int, default=3000, help="scenes of each simulation to learn from")
    parser.add_argument("--rounds", type=int, default=7, help="rounds through all candidates")
    parser.add_argument("--out", type=Path, default=Path("edgewatch/sight/burst_weights.py"))
    args = parser.parse_args()
    cv2.setNumThreads(1)
    number = {"r": args.scenes, "m": args.scenes, "x": args.scenes // 8, "d": args.scenes // 8}
    own = joined([collect(kind, range(max(2, number[kind]))) for kind in "rmxd"])
    print(f"{len(own.right)} candidates, {int(own.right.sum())} bursts", flush=True)
    weights = learn_sieve(own, max(1, args.rounds // 3)) + learn_net(own, args.rounds)
    write(weights, args.out)
    for kind in "rmxd":
        apart = collect(kind, range(20_000, 20_000 + max(2, number[kind] // 10)))
        sieve, net = judge(weights, apart.patches)
        passed = sieve >= SIFT_LEAST
        f1, threshold = best_f1(np.where(passed, net, 0), apart.right)
        print(
            f"{kind}: {len(net)} candidates apart, {passed.mean():.3f} pass the sieve and with them "
            f"{passed[apart.right].sum()} of {apart.right.sum()} bursts; F1 of candidates {f1:.3f} at {threshold:.2f}; "
            f"{(net[~apart.right & passed] > 0.4).sum()} others taken for bursts",
            flush=True,
        )


if __name__ == "__main__":
    main()
