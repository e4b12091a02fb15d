"""Steps left alone: streaks of which only one end is seen, because the other is hidden or fades out.

All sparks of one stream fly at nearly the same speed at one distance, so one end says where the other must be. But most
steps left alone are no streak's end: a streak's own unevenness, a crossing, the flank of a neighbour. A small
perceptron weighs what speaks for each: its height, whether it leads from darkness, whether it points to the contact
point, whether the line beyond stays lit for the typical length, and whether a streak seen whole explains it already.
Its weights were learnt from both simulations with varied rendering by ``tests/bench/learn_streaks.py``.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from edgewatch.sight import lone_weights as learnt
from edgewatch.sight.lengths import Lengths
from edgewatch.sight.reading import read_levels
from edgewatch.sight.steps import Steps

DARK_NOISE = 2.5
DARK_SHARE = 0.15
"""A streak with one end seen runs until it is darker than these noise deviations and this share of its step."""

LEAST_PX = 8.0
LEAST_SHARE = 0.6
"""It is at least this long, or this share of what is typical."""

LONG_PX = 48.0
"""Points along a line lie a pixel apart, on lines longer than this two."""

SAME_SIDE_PX = 2.0
SAME_COS = 0.97
"""Two lines may be one when the middle of one lies within this of the other's line, and directions agree so well."""

END_SIDE_PX = 3.5
END_FAR_PX = 12.0
"""The same end of another line explains a step when it lies this near beside its line; and not at all so far along it."""

ANGLE_LEAST = 0.02
ANGLE_UNKNOWN = 0.05
"""Angle to the ray from the contact point that the error of a direction makes (rad); and what is taken for it while
streaks do not come from the contact point as given: the middle of what is seen otherwise."""

FAR_FROM, FAR_TO = 0.85, 1.15
FAR_BOX = 2
BESIDE_PX = 2.0
BESIDE_ALONG_PX = np.asarray((1.5, 2.5, 3.5))

MOST = 4.0
"""Ratios of brightness and of lengths count no further than this."""

ODDS_LEAST = -0.4
"""Logarithm of the odds from which a streak is listed: four in ten, half of the F1 that is reached, where F1 is largest
(Lipton, Elkan & Naryanaswamy, ECML 2014)."""

SAME_WEIGHT = 2.0
"""What a line has in common with a likelier one counts so much against it."""


@dataclass(frozen=True, slots=True, eq=False)
class Lone:
    """Lines of which one end is seen, arrays of length N: ``begin``, ``end`` (N, 2) px; ``marks`` float32 (N, F), what
    speaks for each being a streak.
    """

    begin: NDArray[np.float64]
    end: NDArray[np.float64]
    marks: NDArray[np.float32]


def follow_steps(
    steps: Steps,
    alone: NDArray[np.int64],
    whole_begin: NDArray[np.float64],
    whole_end: NDArray[np.float64],
    whole_height: NDArray[np.float64],
    blurred: NDArray[np.float32],
    noise: float,
    lengths: Lengths,
) -> Lone:
    """Lines from the steps ``alone`` int64 (K,), as long as is typical there, or until it is dark. ``whole_begin``,
    ``whole_end`` (M, 2) px: streaks of which both ends are seen; ``lengths`` must be known.
    """
    at, inward = steps.at[alone], steps.inward[alone]
    size = lengths.typical_px(at)
    size = lengths.typical_px(at + 0.5 * size[:, None] * inward)
    if lengths.from_contact:  # nothing glows before it has left the wheel
        size = np.where(steps.begins[alone], size, np.minimum(size, np.maximum(lengths.away_px(at), LEAST_PX)))
    apart = np.where(size > LONG_PX, 2.0, 1.0)
    number = np.maximum(np.ceil(FAR_TO * size / apart).astype(np.int64), 2) + 2 * FAR_BOX
    first = np.cumsum(number) - number
    place = (np.arange(int(number.sum())) - np.repeat(first - 1.0, number)) * np.repeat(apart, number)
    x = np.repeat(at[:, 0], number) + place * np.repeat(inward[:, 0], number)
    y = np.repeat(at[:, 1], number) + place * np.repeat(inward[:, 1], number)
    height = steps.height[alone]
    level = read_levels(blurred, x, y)
    part = place / np.repeat(size, number)
    inner = (place > 2.0) & (part <= 1.0)
    dark = (level < np.repeat(np.maximum(DARK_NOISE * noise, DARK_SHARE * height), number)) & inner
    run = np.minimum(np.minimum.reduceat(np.where(dark, place, np.inf), first), size)
    mean = np.add.reduceat(level * inner, first) / np.maximum(np.add.reduceat(inner, first, dtype=np.int64), 1)
    least = np.minimum.reduceat(np.where(inner, level, np.inf), first)
    total = np.concatenate([np.zeros(1), np.cumsum(level, dtype=np.float64)])
    fall = np.zeros(level.size)
    fall[FAR_BOX:-FAR_BOX] = 2.0 * total[FAR_BOX:-FAR_BOX - 1] - total[: -2 * FAR_BOX - 1] - total[2 * FAR_BOX :-1]
    far = np.maximum.reduceat(np.where((part > FAR_FROM) & (part < FAR_TO), fall, 0.0), first) / FAR_BOX
    beside = _beside(at, inward, blurred)
    good = np.flatnonzero(run >= np.minimum(LEAST_PX, LEAST_SHARE * size))
    alone, at, inward, run, size, height = (v[good] for v in (alone, at, inward, run, size, height))
    end = at + inward * run[:, None]
    begins = steps.begins[alone]
    way = inward * np.where(begins, 1.0, -1.0)[:, None]
    common, crowd, cover, end_gap = _compare(at, way, run, begins, whole_begin, whole_end, whole_height)
    angle = np.full(alone.size, ANGLE_UNKNOWN)
    if lengths.from_contact:
        angle = np.hypot(lengths.angle(at, inward), ANGLE_LEAST)
    marks = (
        np.log(height / noise),
        steps.share[alone],
        np.log(angle),
        run / size,
        np.minimum(least[good] / height, MOST),
        np.minimum(mean[good] / height, MOST),
        np.minimum(lengths.away_px(0.5 * (at + end)) / size, MOST),
        common,
        np.minimum(crowd, MOST),
        np.minimum(cover / height, MOST),
        end_gap,
        np.minimum(far[good] / height, MOST),
        np.clip(beside[0][good] / height, -1.0, MOST),
        np.clip(beside[1][good] / height, -1.0, MOST),
        begins,
    )
    own = begins[:, None]
    return Lone(
        begin=np.where(own, at, end), end=np.where(own, end, at), marks=np.stack(marks, axis=1).astype(np.float32)
    )


def _beside(
    at: NDArray[np.float64], inward: NDArray[np.float64], blurred: NDArray[np.float32]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Heights (N,) of the steps beside steps: the greater and the lesser of left and right."""
    along = np.concatenate([BESIDE_ALONG_PX, -BESIDE_ALONG_PX])
    side = np.repeat((-BESIDE_PX, BESIDE_PX), along.size)
    along = np.tile(along, 2)
    x = at[:, :1] + along * inward[:, :1] - side * inward[:, 1:]
    y = at[:, 1:] + along * inward[:, 1:] + side * inward[:, :1]
    level = read_levels(blurred, x.ravel(), y.ravel()).reshape(len(at), 2, 2, -1).mean(axis=3)
    rise = level[:, :, 0] - level[:, :, 1]
    return rise.max(axis=1), rise.min(axis=1)


def _compare(
    at: NDArray[np.float64],
    way: NDArray[np.float64],
    run: NDArray[np.float64],
    begins: NDArray[np.bool_],
    begin: NDArray[np.float64],
    end: NDArray[np.float64],
    height: NDArray[np.float64],
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Of lines from ``at`` (N, 2), along ``way`` or against it for ``run``: greatest share in common with one of M other
    lines, intersection over union, and how far along the nearest of their same ends is (1: END_FAR_PX or more).
    """
    ux, uy = way[:, :1], way[:, 1:]
    ax = np.where(begins, at[:, 0], at[:, 0] - run * way[:, 0])[:, None]
    ay = np.where(begins, at[:, 1], at[:, 1] - run * way[:, 1])[:, None]
    side = [(p[:, 0] - ax) * uy - (p[:, 1] - ay) * ux for p in (begin, end)]
    along = [(p[:, 0] - ax) * ux + (p[:, 1] - ay) * uy for p in (begin, end)]
    own = run[:, None]
    low, high = np.minimum(*along), np.maximum(*along)
    common = np.maximum(np.minimum(high, own) - np.maximum(low, 0.0), 0.0)
    skew = np.abs(side[1] - side[0]) > np.sqrt(1.0 - SAME_COS**2) / SAME_COS * (high - low)
    common[(np.abs(side[0] + side[1]) > 2.0 * SAME_SIDE_PX) | skew] = 0.0
    share = common / (np.maximum(high, own) - np.minimum(low, 0.0))
    cover = (common @ height) / run
    gap = np.where(begins[:, None], np.abs(along[0]), np.abs(along[1] - own))
    gap[np.where(begins[:, None], np.abs(side[0]), np.abs(side[1])) > END_SIDE_PX] = END_FAR_PX
    return share.max(axis=1, initial=0.0), share.sum(axis=1), cover, gap.min(axis=1, initial=END_FAR_PX) / END_FAR_PX


def judge_marks(marks: NDArray[np.float32]) -> NDArray[np.float64]:
    """Logarithm of the odds (N,) that each of the lines described by ``marks`` (N, F) is a streak."""
    hidden = np.maximum(marks @ learnt.HIDDEN + learnt.HIDDEN_BIAS, 0.0)
    return np.asarray(hidden @ learnt.OUTPUT + learnt.OUTPUT_BIAS, dtype=np.float64)


def pick_lines(lone: Lone) -> NDArray[np.int64]:
    """Indices of the lines that are listed: likely enough, and still so less what they share with likelier ones."""
    odds = judge_marks(lone.marks)
    k = np.flatnonzero(odds > ODDS_LEAST)
    k = k[np.argsort(-odds[k], kind="stable")]
    begin, gap = lone.begin[k], lone.end[k] - lone.begin[k]
    length = np.maximum(np.hypot(gap[:, 0], gap[:, 1]), 1e-6)
    unit = gap / length[:, None]
    ux, uy, own = unit[:, :1], unit[:, 1:], length[:, None]
    bx, by = begin[:, 0] - begin[:, :1], begin[:, 1] - begin[:, 1:]
    low = bx * ux + by * uy
    cosine = ux * unit[:, 0] + uy * unit[:, 1]
    high = low + cosine * length
    share = (np.minimum(high, own) - np.maximum(low, 0.0)) / (np.maximum(high, own) - np.minimum(low, 0.0))
    side = (bx + 0.5 * gap[:, 0]) * uy - (by + 0.5 * gap[:, 1]) * ux
    share[(np.abs(side) > SAME_SIDE_PX) | (cosine < SAME_COS)] = 0.0
    most = np.tril(share, -1).max(axis=1, initial=0.0)
    return np.sort(k[odds[k] - SAME_WEIGHT * most > ODDS_LEAST])
