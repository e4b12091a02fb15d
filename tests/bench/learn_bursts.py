"""Learns the weights of the burst net from both simulations with varied rendering.

``python -m tests.bench.learn_bursts`` writes ``edgewatch/sight/burst_weights.py`` and prints how well candidates of
scenes kept apart are told. Seeds: see ``_scene``; none of them is used by a benchmark or a test.
"""

from __future__ import annotations

import argparse
import base64
import functools
import math
import tempfile
import zlib
from collections.abc import Callable, Iterator
from dataclasses import dataclass, fields, replace
from pathlib import Path
from typing import Any

import cv2
import numpy as np
from numpy.typing import NDArray

from edgewatch.rehearsal.camera import CameraModel
from edgewatch.rehearsal.scene import Stream as RehearsalStream
from edgewatch.rehearsal.steel import find_steel
from edgewatch.sight.background import Background
from edgewatch.sight.burst_net import (
    FIRST_PLACES,
    FIRST_REACH,
    FIRST_STEP,
    SECOND_PLACES,
    SECOND_REACH,
    SECOND_STEP,
    SIFT_LEAST,
    windows,
)
from edgewatch.sight.bursts import CONTACT_PX
from edgewatch.sight.candidates import find_candidates
from edgewatch.sight.optics import Optics
from edgewatch.sight.ridges import find_ridges
from edgewatch.sight.rings import (
    CONTEXT_SIZE,
    RING_DIRECTIONS,
    SIFT_RINGS,
    SIFT_STEP,
    read_before,
    read_context,
    read_patches,
)
from edgewatch.sight.segments import find_segments
from tests.scenes import Look, Scene, Stream, crossing_lines, loose_dashes

FRAMES, FAST_FRAMES = 6, 10
"""Pictures of a scene; of more than 400 a second, which show much the same, so many."""
SIFT_UNITS = 24
FIRST_UNITS, SECOND_UNITS, HIDDEN_UNITS, OUTPUTS = 24, 32, 64, 5
RIGHT_PX, DOUBTFUL_PX = 10.0, 14.0
"""A candidate this near to a burst, to the light that its arms give, or to the way from one to the other is one, and
shall be moved to where it burst; up to the second distance it is left out."""
DRAWN_S, HARDLY_DRAWN_S = 0.35e-3, 0.3e-3
SHIFT_WEIGHT, LATE_WEIGHT = 0.02, 0.1
"""Weights of the two lesser tasks beside the cross entropy of the main one."""
KEPT_SHARE = 0.9
"""Share of hidden units kept in a step (Srivastava et al. 2014)."""
STEPS = np.float32(48.0)
"""Levels are kept in steps of a 48th, far below their noise of a fifth and more; none is above 5.2."""
CHUNK = {"r": 100, "m": 100, "x": 12, "d": 12}
"""Scenes of each kind whose candidates are kept in one file."""
TAUGHT_LEAST = 0.01
"""Candidates to which the sieve gives at least this are learnt from: more than are looked at later."""
SIFT_SCENES = {"r": 300, "m": 300, "x": 40, "d": 40}
SIFT_ROUNDS = 30
"""Scenes from which the sieve is learnt, and rounds; the net then learns from what passes."""
SHARE_SCENES = (("r", 60), ("m", 60))
"""Scenes that tell the share of bursts among the candidates, doubtful ones included, as the station meets them."""
APART_SCENES = {"r": 40, "m": 40, "x": 8, "d": 8}
"""Scenes kept apart."""

Array = NDArray[np.float64]
Floats = NDArray[np.float32]
Bools = NDArray[np.bool_]


def _optics(rng: np.random.Generator) -> Optics:
    """Three in four as in the field's usual settings, the others anything; one in four looks at a later part of the
    stream."""
    if rng.uniform() < 0.75:
        exposure_ms, fps = [(2.5, 200.0), (2.5, 200.0), (8.0, 60.0), (0.9, 1000.0), (0.9, 1000.0), (4.0, 120.0)][
            int(rng.integers(6))
        ]
    else:
        fps = float(np.exp(rng.uniform(np.log(50.0), np.log(1000.0))))
        exposure_ms = min(10.0, float(rng.uniform(0.3, 0.97)) * 1e3 / fps)
    degrees = float(rng.uniform(-180, 180)) if rng.uniform() < 0.8 else float(rng.choice([-90.0, 0.0, 90.0, 180.0]))
    c, s = math.cos(math.radians(degrees)), math.sin(math.radians(degrees))
    mm_per_px = float(rng.choice([0.5, 0.5, 0.8, 1.0, 1.0, 1.4]))
    outside_px = float(rng.uniform(0.0, 350.0)) / mm_per_px if rng.uniform() < 0.25 else 0.0
    return Optics(
        width_px=640,
        height_px=400,
        mm_per_px=mm_per_px,
        contact_px=(320 - c * (280 + outside_px), 200 - s * (180 + outside_px)),
        direction_deg=degrees,
        exposure_ms=exposure_ms,
        fps=fps,
    )


@dataclass(frozen=True, kw_only=True)
class Shot:
    """A picture and its glowing bursts: ``at`` (K, 2) px, ``light`` (K, 2) px the middle of what the arms drew,
    ``drew_s`` (K,) for how long the third arm drew, ``late`` whether it went off before, ``fresh`` whether no picture
    before showed it so long.
    """

    picture: NDArray[np.uint8]
    at: Array
    light: Array
    drew_s: Array
    late: Bools
    fresh: Bools
    optics: Optics


def _scene(kind: str, seed: int) -> Iterator[Shot]:
    """Pictures of one scene: ``r`` rehearsal, ``m`` the other simulation, ``x`` crossing lines, ``d`` loose dashes and
    spots."""
    rng = np.random.default_rng([79, seed, ord(kind)])
    optics = _optics(rng)
    frames = FAST_FRAMES if optics.fps > 400.0 else FRAMES
    hazard = float(np.exp(rng.uniform(np.log(0.05), np.log(4.0))))
    sparks = float(np.exp(rng.uniform(np.log(600), np.log(6500))))
    jpeg = int(rng.integers(60, 90)) if rng.uniform() < 0.2 else 0
    shake_px = float(rng.choice([0.0, 0.0, 0.0, 1.5]))
    hot_pixels = int(rng.choice([0, 0, 0, 40]))
    if kind == "r":
        steel = find_steel(str(rng.choice(["C15", "C45", "C80", "42CrMo4"]))).varied(rng)
        if rng.uniform() < 0.6:
            steel = replace(steel, hazard_per_m=hazard)
        camera = CameraModel().varied(rng) if rng.uniform() < 0.6 else CameraModel()
        camera = replace(camera, jpeg_quality=jpeg, vibration_px=shake_px, hot_pixels=hot_pixels)
        source = RehearsalStream(optics, steel, rng=rng, sparks_per_s=sparks, camera=camera)
        listed: set[int] = set()
        for _ in range(frames):
            picture, truth = source.frame()
            fresh = np.array([int(one) not in listed for one in truth.burst_id], np.bool_)
            listed.update(int(one) for one in truth.burst_id[truth.drew_ms >= 1e3 * DRAWN_S])
            yield Shot(
                picture=picture,
                at=truth.bursts.astype(np.float64).reshape(-1, 2),
                light=truth.burst_light.astype(np.float64).reshape(-1, 2),
                drew_s=truth.drew_ms.astype(np.float64) * 1e-3,
                late=truth.late,
                fresh=fresh,
                optics=optics,
            )
        return
    look = Look(
        spread_px=float(rng.uniform(0.65, 1.5)),
        noise_dn=float(rng.uniform(1.0, 4.0)),
        gamma=float(rng.choice([1.0, 1.0, 0.6])),
        gain=float(rng.uniform(0.4, 1.8)),
        per_length=bool(rng.integers(2)),
        jpeg=jpeg,
        shake_px=shake_px,
        hot_pixels=hot_pixels,
    )
    if kind in "xd":
        for _ in range(FRAMES):
            if kind == "d":
                picture = loose_dashes(optics, look, rng)
            else:  # at random; all turned by one angle; three at 60 degrees make a star of six even arms, the hardest
                angle = (math.nan, float(rng.uniform(5, 90)), float(rng.normal(60, 6)))[int(rng.integers(3))]
                picture = crossing_lines(optics, look, rng, angle_deg=angle)
            none, nowhere = np.zeros(0, np.bool_), np.zeros((0, 2))
            yield Shot(
                picture=picture, at=nowhere, light=nowhere, drew_s=np.zeros(0), late=none, fresh=none, optics=optics
            )
        return
    stream = Stream(
        hazard_per_m=hazard,
        sparks_per_s=sparks,
        speed_m_s=float(rng.uniform(17.0, 28.0)),
        kick=float(rng.uniform(0.25, 1.2)),
        fan_deg=float(rng.uniform(6, 14)),
        arm_glow_s=float(rng.uniform(0.001, 0.003)),
        brightness=float(rng.uniform(40, 120)),
        carries_on=float(rng.uniform(0, 0.6)),
        arms=(3, int(rng.integers(5, 10))),
    )
    scene = Scene(optics, stream, look, int(rng.integers(2**31)), (frames + 0.5) / optics.fps)
    for picture, own in scene:
        shown = {tuple(at) for at in own.bursts.tolist()}  # of the glowing ones those that count first here
        first = np.array([tuple(at) in shown for at in own.glowing.tolist()], np.bool_)
        yield Shot(
            picture=picture,
            at=own.glowing,
            light=own.light,
            drew_s=own.drew_s,
            late=own.glowing_late,
            fresh=first | (own.drew_s < DRAWN_S),
            optics=optics,
        )


@dataclass(frozen=True, kw_only=True)
class Lessons:
    """Candidates, N of them: ``patches`` and ``before`` uint8 (N, F) and (N, G), levels in ``STEPS``; ``context``
    float32 (N, C); ``right`` bool, whether each is a burst; ``shift`` float32 (N, 2), where it is along the stream and
    across; ``late``, ``fresh`` bool; ``scene`` int64, its seed.
    """

    patches: NDArray[np.uint8]
    before: NDArray[np.uint8]
    context: Floats
    right: Bools
    shift: Floats
    late: Bools
    fresh: Bools
    scene: NDArray[np.int64]


def load(path: Path, make: Callable[[], Lessons]) -> Lessons:
    """Candidates kept in a file, made and kept if it is not there."""
    if not path.exists():
        own = make()
        part = path.with_suffix(".part.npz")
        np.savez(part, **{f.name: getattr(own, f.name) for f in fields(Lessons)})
        part.rename(path)
        return own
    with np.load(path) as kept:
        return Lessons(**{f.name: kept[f.name] for f in fields(Lessons)})


def collect_chunk(number: int, sieve: list[Floats]) -> Lessons:
    """Candidates of the scenes of every kind that make chunk ``number``."""
    return joined([collect(kind, range(number * n, (number + 1) * n), sieve) for kind, n in CHUNK.items()])


def _packed(levels: Floats) -> NDArray[np.uint8]:
    return np.asarray(np.minimum(np.rint(levels * STEPS), 255.0), dtype=np.uint8)


def collect(kind: str, seeds: range, sieve: list[Floats] | None = None, *, every: bool = False) -> Lessons:
    """Candidates of scenes that pass the sieve, if there is one; those about which the truth is in doubt are left out
    unless ``every`` one is wanted.
    """
    parts = [part for seed in seeds for part in _collect_scene(kind, seed, sieve, every=every)]
    return joined(parts)


def _collect_scene(kind: str, seed: int, sieve: list[Floats] | None, *, every: bool) -> Iterator[Lessons]:
    background, before = None, None
    for shot in _scene(kind, seed):
        optics = shot.optics
        if background is None:
            background, scratch = Background(period_s=optics.period_s), np.full(shot.picture.size, -1, np.int32)
        excess = background.excess(shot.picture)
        ridges = find_ridges(excess, background.noise_dn)
        pieces = find_segments(ridges, scratch)
        at = find_candidates(pieces, ridges)
        at = at[np.hypot(*(at - optics.contact_px).T) > CONTACT_PX]
        right, doubtful, nearest, gap = _compare(at, shot)
        patches = read_patches(at, ridges.blurred, ridges.threshold_noise, optics.contact_px)
        kept = ~doubtful | every
        if sieve is not None:
            kept &= _sifted(sieve, rough(patches)) >= (SIFT_LEAST if every else TAUGHT_LEAST)
        at, right, nearest, gap = at[kept], right[kept], nearest[kept], gap[kept]
        away = at - np.asarray(optics.contact_px)
        away /= np.hypot(away[:, 0], away[:, 1])[:, None]
        none = np.zeros(len(at), np.bool_)
        yield Lessons(
            patches=_packed(patches[kept]),
            before=_packed(read_before(at, before, optics.contact_px)),
            context=read_context(at, pieces, ridges.threshold_noise, optics, has_before=before is not None),
            right=right,
            shift=np.stack([(gap * away).sum(axis=1), gap[:, 1] * away[:, 0] - gap[:, 0] * away[:, 1]], axis=1).astype(
                np.float32
            ),
            late=shot.late[nearest] if len(shot.late) else none,
            fresh=shot.fresh[nearest] if len(shot.late) else none,
            scene=np.full(len(at), seed, np.int64),
        )
        before = ridges


def _compare(at: Array, shot: Shot) -> tuple[Bools, Bools, NDArray[np.int64], Array]:
    """Of each candidate: whether it is a burst, whether that is in doubt, which burst, and the way there (px)."""
    none = np.zeros(len(at), np.bool_)
    if not len(at) or not len(shot.at):
        return none, none, np.zeros(len(at), np.int64), np.zeros((len(at), 2))
    way, flown = shot.at[None] - at[:, None], shot.light - shot.at
    back = np.einsum("mkc,kc->mk", -way, flown) / np.maximum((flown**2).sum(axis=1), 1e-9)
    aside = way + np.clip(back, 0.0, 1.0)[..., None] * flown[None]
    distance = np.hypot(aside[..., 0], aside[..., 1])
    drawn = np.where(shot.drew_s[None] >= DRAWN_S, distance, np.inf)
    nearest = np.argmin(drawn, axis=1)
    rows = np.arange(len(at))
    right = drawn[rows, nearest] < RIGHT_PX
    hardly = np.where(shot.drew_s[None] >= HARDLY_DRAWN_S, distance, np.inf).min(axis=1)
    return right, ~right & (hardly < DOUBTFUL_PX), nearest, way[rows, nearest]


def joined(lessons: list[Lessons]) -> Lessons:
    """All of them."""
    return Lessons(**{f.name: np.concatenate([getattr(one, f.name) for one in lessons]) for f in fields(Lessons)})


def gathered(paths: list[Path]) -> Lessons:
    """All that is kept in files, column by column, so that little is in memory twice."""
    kept = [np.load(path) for path in paths]
    return Lessons(**{f.name: np.concatenate([one[f.name] for one in kept]) for f in fields(Lessons)})


def mirrored(patches: NDArray[np.uint8]) -> NDArray[np.uint8]:
    """The same descriptions, of any number of rings, seen in a mirror along the stream."""
    rings = patches.reshape(len(patches), -1, RING_DIRECTIONS)
    return np.roll(rings[:, :, ::-1], 1, axis=2).reshape(patches.shape)


def rough(patches: NDArray[Any]) -> NDArray[Any]:
    """What the sieve sees of descriptions (N, F)."""
    rings = patches.reshape(len(patches), patches.shape[1] // RING_DIRECTIONS, RING_DIRECTIONS)
    seen = rings[:, list(SIFT_RINGS), ::SIFT_STEP]
    return seen.reshape(len(patches), seen.shape[1] * seen.shape[2])


def levels(packed: NDArray[np.uint8]) -> Floats:
    """Levels as they were read."""
    return np.asarray(packed.astype(np.float32) * (np.float32(1.0) / STEPS))


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


def probability(logit: NDArray[np.floating]) -> Floats:
    """Logistic function."""
    return np.asarray(1.0 / (1.0 + np.exp(-np.clip(logit, -30, 30))), np.float32)


def learn_sieve(lessons: Lessons, rounds: int, seed: int = 1) -> list[Floats]:
    """The small perceptron; its input is standardised while learning, and that is folded into its weights."""
    rng = np.random.default_rng(seed)
    some = levels(rough(lessons.patches[:: max(1, len(lessons.right) // 50_000)]))
    mean, scale = some.mean(axis=0), some.std(axis=0) + np.float32(0.1)
    p = start(rng, (len(mean), SIFT_UNITS), (SIFT_UNITS, 1))
    adam = Adam(p, decay=0.01)
    for rows, rate in batches(len(lessons.right), rounds, rng):
        packed = lessons.patches[rows]
        x = (levels(rough(mirrored(packed) if rng.uniform() < 0.5 else packed)) - mean) / scale
        z = x @ p[0] + p[1]
        hidden = np.maximum(z, 0)
        d = (probability(hidden @ p[2] + p[3]) - lessons.right[rows, None]) / len(rows)
        back = (d @ p[2].T) * (z > 0)
        adam.step([x.T @ back, back.sum(axis=0), hidden.T @ d, d.sum(axis=0)], rate)
    weights = p[0] / scale[:, None]
    return [weights, p[1] - mean @ weights, p[2], p[3]]


def _sifted(sieve: list[Floats], patches: Floats) -> Floats:
    """Probabilities (N,) that a sieve gives."""
    return probability(np.maximum(patches @ sieve[0] + sieve[1], 0) @ sieve[2] + sieve[3])[:, 0]


def learn_net(lessons: Lessons, rounds: int, seed: int = 2) -> list[Floats]:
    """The net, by back-propagation; input standardised ring by ring, folded into the weights that it meets."""
    rng = np.random.default_rng(seed)
    some = slice(None, None, max(1, len(lessons.right) // 50_000))
    mean, scale = _standard(_rings(lessons.patches[some], lessons.before[some]), axis=(0, 1))
    context_mean, context_scale = _standard(lessons.context[some], axis=0)
    taps_1, taps_2, channels = 2 * FIRST_REACH + 1, 2 * SECOND_REACH + 1, len(mean)
    flat = SECOND_PLACES * SECOND_UNITS
    p = start(
        rng,
        (taps_1 * channels, FIRST_UNITS),
        (taps_2 * FIRST_UNITS, SECOND_UNITS),
        (flat + CONTEXT_SIZE, HIDDEN_UNITS),
        (HIDDEN_UNITS, OUTPUTS),
    )
    adam = Adam(p, decay=0.01)
    for rows, rate in batches(len(lessons.right), rounds, rng):
        count = len(rows)
        patches, before, shift = lessons.patches[rows], lessons.before[rows], lessons.shift[rows]
        if rng.uniform() < 0.5:
            patches, before, shift = mirrored(patches), mirrored(before), shift * np.array([1.0, -1.0], np.float32)
        w1 = windows((_rings(patches, before) - mean) / scale, FIRST_REACH, FIRST_STEP)
        z1 = w1 @ p[0] + p[1]
        w2 = windows(np.maximum(z1, 0).reshape(count, FIRST_PLACES, -1), SECOND_REACH, SECOND_STEP)
        z2 = w2 @ p[2] + p[3]
        context = (lessons.context[rows] - context_mean) / context_scale
        a2 = np.concatenate([np.maximum(z2, 0).reshape(count, -1), context], axis=1)
        z3 = a2 @ p[4] + p[5]
        kept = (rng.random(z3.shape) < KEPT_SHARE) / np.float32(KEPT_SHARE)
        a3 = np.maximum(z3, 0) * kept
        d4 = _slopes(a3 @ p[6] + p[7], lessons, rows, shift)
        d3 = (d4 @ p[6].T) * kept * (z3 > 0)
        d2 = (d3 @ p[4][:flat].T).reshape(z2.shape) * (z2 > 0)
        d1 = unwindowed((d2 @ p[2].T).reshape(count, SECOND_PLACES, taps_2, -1)).reshape(z1.shape) * (z1 > 0)
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
    p[4][flat:] /= context_scale[:, None]
    p[5] -= context_mean @ p[4][flat:]
    return [first, p[1] - np.tile(mean, taps_1) @ first, *p[2:]]


def _rings(patches: NDArray[np.uint8], before: NDArray[np.uint8]) -> Floats:
    """Levels on all rings, of this picture and the one before: (N, directions, channels)."""
    both = np.concatenate([part.reshape(len(part), -1, RING_DIRECTIONS) for part in (patches, before)], axis=1)
    return levels(both.transpose(0, 2, 1))


def _standard(values: Floats, axis: int | tuple[int, ...]) -> tuple[Floats, Floats]:
    return values.mean(axis=axis), values.std(axis=axis) + np.float32(0.1)


def _slopes(out: Floats, lessons: Lessons, rows: NDArray[np.int64], shift: Floats) -> Floats:
    """Derivatives of the loss: cross entropies, and Huber's of the shift, the lesser tasks over bursts only."""
    d = np.zeros_like(out)
    right = lessons.right[rows]
    d[:, 0] = (probability(out[:, 0]) - right) / len(out)
    number = max(1, int(right.sum()))
    d[right, 1:3] = SHIFT_WEIGHT * np.clip(out[right, 1:3] - shift[right], -1, 1) / (2 * number)
    d[right, 3] = LATE_WEIGHT * (probability(out[right, 3]) - lessons.late[rows][right]) / number
    d[right, 4] = LATE_WEIGHT * (probability(out[right, 4]) - lessons.fresh[rows][right]) / number
    return d


def learn_share(context: Floats, sure: Floats) -> list[Floats]:
    """Logistic regression of the net's probabilities on the context alone (Newton's method): what is to be expected
    of a candidate before a look at it.
    """
    x = np.concatenate([context, np.ones((len(sure), 1))], axis=1)
    weights = np.zeros(x.shape[1])
    for _ in range(8):
        p = probability(x @ weights).astype(np.float64)
        bend = (x * (p * (1.0 - p))[:, None]).T @ x + 1e-3 * np.eye(len(weights))
        weights += np.linalg.solve(bend, x.T @ (sure - p))
    return [weights[:-1, None].astype(np.float32), weights[-1:].astype(np.float32)]


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


def best_f1(p: Floats, right: Bools) -> tuple[float, float]:
    """Greatest F1 over thresholds, and its threshold."""
    return max(
        (2 * float((right & (p > t)).sum()) / max(1, int((p > t).sum() + right.sum())), float(t))
        for t in np.linspace(0.1, 0.9, 33)
    )


NAMES = ("SIFT", "SIFTED", "FIRST", "SECOND", "HIDDEN", "OUTPUT", "SHARE")
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


def judge(weights: list[Floats], lessons: Lessons) -> tuple[Floats, Floats]:
    """Probabilities after sieve and net, as the station computes them."""
    sieve, net = [], []
    for k in range(0, len(lessons.right), 4096):
        rows = slice(k, k + 4096)
        sieve.append(_sifted(weights[:4], levels(rough(lessons.patches[rows]))))
        rings = _rings(lessons.patches[rows], lessons.before[rows])
        first = np.maximum(windows(rings, FIRST_REACH, FIRST_STEP) @ weights[4] + weights[5], 0)
        first = first.reshape(len(rings), FIRST_PLACES, -1)
        second = np.maximum(windows(first, SECOND_REACH, SECOND_STEP) @ weights[6] + weights[7], 0)
        joint = np.concatenate([second.reshape(len(rings), -1), lessons.context[rows]], axis=1)
        hidden = np.maximum(joint @ weights[8] + weights[9], 0)
        net.append(probability(hidden @ weights[10] + weights[11])[:, 0])
    return np.concatenate(sieve), np.concatenate(net)


def main() -> None:
    """Collect, learn, report, write."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0] if __doc__ else None)
    parser.add_argument("--chunks", type=int, default=80, help="hundreds of scenes of each simulation to learn from")
    parser.add_argument("--rounds", type=int, default=8, help="rounds through all candidates")
    parser.add_argument("--out", type=Path, default=Path("edgewatch/sight/burst_weights.py"))
    parser.add_argument("--cache", type=Path, help="keep candidates in this directory, and take those that are there")
    args = parser.parse_args()
    cv2.setNumThreads(1)
    with tempfile.TemporaryDirectory() as place:
        learn(args.cache or Path(place), args.chunks, args.rounds, args.out)


def learn(cache: Path, chunks: int, rounds: int, out: Path) -> None:
    """Everything, candidates kept in the directory ``cache``."""
    first = load(cache / "sift.npz", lambda: joined([collect(kind, range(n)) for kind, n in SIFT_SCENES.items()]))
    sieve = learn_sieve(first, SIFT_ROUNDS)
    del first
    paths = [cache / f"chunk_{k:03d}.npz" for k in range(chunks)]
    for k, path in enumerate(paths):
        load(path, functools.partial(collect_chunk, k, sieve))
    own = gathered(paths)
    print(f"{len(own.right)} candidates pass the sieve, {int(own.right.sum())} bursts", flush=True)
    weights = sieve + learn_net(own, rounds)
    del own
    shares = load(
        cache / "share.npz",
        lambda: joined([collect(kind, range(30_000, 30_000 + n), sieve, every=True) for kind, n in SHARE_SCENES]),
    )
    weights += learn_share(shares.context, judge(weights, shares)[1])
    write(weights, out)
    for kind, number in APART_SCENES.items():
        seeds = range(20_000, 20_000 + number)
        apart = load(cache / f"apart_{kind}.npz", functools.partial(collect, kind, seeds))
        rough, net = judge(weights, apart)
        passed = rough >= SIFT_LEAST
        f1, threshold = best_f1(np.where(passed, net, np.float32(0)), apart.right)
        print(
            f"{kind}: {len(net)} candidates apart, {passed.mean():.3f} pass the sieve and with them "
            f"{passed[apart.right].sum()} of {apart.right.sum()} bursts; F1 of candidates {f1:.3f} at "
            f"{threshold:.2f}; {(net[~apart.right & passed] > 0.4).sum()} others taken for bursts",
            flush=True,
        )


if __name__ == "__main__":
    main()
