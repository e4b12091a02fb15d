"""Steps left alone: streaks of which only one end is seen, because the other is hidden or fades out.

All sparks of one stream fly at nearly the same speed at one distance, so one end says where the other must be. But most
steps left alone are no streak's end: a streak's own unevenness, a crossing, the flank of a neighbour. A small
perceptron weighs what speaks for each: its height, whether it leads from darkness, whether it points to the contact
point, whether the line beyond stays lit for the typical length, whether a streak seen whole explains it already, and
how many steps and streaks the picture has. Its weights were learnt from both simulations with varied rendering by
``tests/bench/learn_streaks.py``.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from edgewatch.sight import lone_weights as learnt
from edgewatch.sight import native
from edgewatch.sight.lengths import Lengths
from edgewatch.sight.native import records
from edgewatch.sight.reading import read_levels
from edgewatch.sight.steps import Steps

TURN_MOST = 0.28
"""While streaks come from the contact point, a step whose line passes it by more than this sine (16 degrees) is no end
of one."""

TURN_ERROR_MOST = 0.12
TURN_ERRORS = 2.0
TURN_SPREAD = 0.02
"""Error of a piece's direction: half a pixel at either end over its length, at most the first. A line within so many
errors of the ray from the contact point is turned towards it, the more the greater its error is against the spread
(rad) of streaks about the ray."""

TURN_UNKNOWN = 0.05
"""Taken for the angle to the ray while streaks do not come from the contact point as given (rad)."""

DARK_NOISE = 2.5
DARK_SHARE = 0.15
"""A line runs until it is darker than these noise deviations and this share of its step."""

INNER_PX = 2.0
"""So near to its step a line is half lit by its own blur (px)."""

LEAST_PX = 8.0
LEAST_SHARE, LEAST_LIT = 0.6, 0.35
"""A line is at least this long, where streaks are short this share of what is typical; and it stays lit over the last
share of that. Of shorter ones one in a hundred is a streak."""

LONG_PX = 48.0
"""Points along a line lie a pixel apart, on lines longer than this two."""

FAR_FROM, FAR_TO = 0.85, 1.15
FAR_BOX = 2
"""The other end is looked for between these shares of the typical length, by boxes of so many points."""

BESIDE_PX = 2.0
BESIDE_ALONG_PX = np.asarray((1.5, 2.5, 3.5))
"""The steps beside a step are read so far to the left and right, at these distances before and behind (px)."""

SAME_SIDE_PX = 2.0
SAME_COS = 0.97
SKEW_MOST = math.sqrt(1.0 - SAME_COS**2) / SAME_COS
"""Two lines may be one when the middle of one lies within this of the other's line, and directions agree so well."""

END_SIDE_PX = 3.5
END_FAR_PX = 12.0
"""The same end of another line explains a step when it lies this near beside its line, and not at all so far along."""

MOST = 4.0
"""Ratios of brightness and of lengths count no further than this."""

ODDS_LEAST = -0.6
"""Logarithm of the odds from which a line is listed: where F1 is largest on tuning scenes. Theory says half of the F1
that is reached (Lipton, Elkan & Naryanaswamy, ECML 2014), -0.3; but lines that share with a likelier one are dropped
here besides."""

SAME_WEIGHT = 1.0
"""What a line has in common with a likelier one, as a share of both, counts so much against it."""

ARMS_SHARE = 0.4
"""An arm shares less than this with a longer one."""


RULES = records.LoneRules(
    turn_most=TURN_MOST,
    turn_error_most=TURN_ERROR_MOST,
    turn_errors=TURN_ERRORS,
    turn_spread=TURN_SPREAD,
    turn_unknown=TURN_UNKNOWN,
    dark_noise=DARK_NOISE,
    dark_share=DARK_SHARE,
    inner_px=INNER_PX,
    least_px=LEAST_PX,
    least_share=LEAST_SHARE,
    least_lit=LEAST_LIT,
    long_px=LONG_PX,
    far_from=FAR_FROM,
    far_to=FAR_TO,
    beside_px=BESIDE_PX,
    most=MOST,
    odds_least=ODDS_LEAST,
    same_weight=SAME_WEIGHT,
    arms_share=ARMS_SHARE,
    beside_along_px=native.place(BESIDE_ALONG_PX),
    same_side_px=SAME_SIDE_PX,
    same_cos=SAME_COS,
    skew_most=SKEW_MOST,
    end_side_px=END_SIDE_PX,
    end_far_px=END_FAR_PX,
    far_box=FAR_BOX,
    beside_count=BESIDE_ALONG_PX.size,
)
"""All of this for the compiled form."""

_WEIGHTS = [np.ascontiguousarray(part) for part in (learnt.HIDDEN, learnt.HIDDEN_BIAS, learnt.OUTPUT)]
NET = records.LoneNet(*map(native.place, _WEIGHTS), float(learnt.OUTPUT_BIAS.item()), learnt.HIDDEN.shape[1])
"""And the perceptron."""


@dataclass(frozen=True, slots=True, eq=False)
class Lone:
    """Lines of which one end is seen, arrays of length N: ``begin``, ``end`` (N, 2) px; ``begins``: the begin is
    seen, not the end; ``marks`` float32 (N, F), what speaks for each being a streak.
    """

    begin: NDArray[np.float64]
    end: NDArray[np.float64]
    begins: NDArray[np.bool_]
    marks: NDArray[np.float32]


def find_lone(
    steps: Steps, pairs: NDArray[np.int64], blurred: NDArray[np.float32], noise: float, lengths: Lengths
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Begins and ends (N, 2) px of the lines that steps in no pair make: streaks, then what may be arms. ``pairs``
    int64 (M, 2): begin and end of the streaks of which both ends are seen.
    """
    none = np.zeros((0, 2))
    if not lengths.known or steps.height.size == 2 * len(pairs):
        return none, none
    alone = np.ones(steps.height.size, np.bool_)
    alone[pairs.ravel()] = False
    left = np.flatnonzero(alone)
    whole = (steps.at[pairs[:, 0]], steps.at[pairs[:, 1]], steps.height[pairs].min(axis=1))
    lone = follow_steps(steps, left, whole, blurred, noise, lengths)
    listed = pick_lines(lone)
    arm_begin, arm_end = follow_arms(steps, left, blurred, noise, lengths)
    return np.concatenate([lone.begin[listed], arm_begin]), np.concatenate([lone.end[listed], arm_end])


def follow_steps(
    steps: Steps,
    alone: NDArray[np.int64],
    whole: tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]],
    blurred: NDArray[np.float32],
    noise: float,
    lengths: Lengths,
) -> Lone:
    """Lines from the steps ``alone`` int64 (K,), as long as is typical there, or until it is dark. ``whole``: begins
    and ends (M, 2) px and heights (M,) DN of the streaks of which both ends are seen; ``lengths`` must be known.
    """
    at, inward = steps.at[alone], steps.inward[alone]
    crowded = math.log1p(alone.size), math.log1p(len(whole[0]))
    angle = np.full(alone.size, TURN_UNKNOWN)
    if lengths.from_contact:
        sine = lengths.turn(at, inward)
        radial = np.flatnonzero(np.abs(sine) < TURN_MOST)
        alone, at, sine = alone[radial], at[radial], sine[radial]
        inward, angle = _turn_to_ray(inward[radial], sine, steps.size[alone]), np.hypot(sine, TURN_SPREAD)
    begins, height = steps.begins[alone], steps.height[alone]
    size = lengths.typical_px(at)
    size = lengths.typical_px(at + 0.5 * size[:, None] * inward)
    if lengths.from_contact:  # nothing glows before it has left the wheel
        size = np.where(begins, size, np.minimum(size, np.maximum(lengths.away_px(at), LEAST_PX)))
    run, least, mean, far = _read_along(at, inward, size, np.maximum(DARK_NOISE * noise, DARK_SHARE * height), blurred)
    good = np.flatnonzero(run >= np.maximum(np.minimum(LEAST_PX, LEAST_SHARE * size), LEAST_LIT * size))
    at, inward, begins, height, angle = at[good], inward[good], begins[good], height[good], angle[good]
    size, run = size[good], run[good]
    end = at + inward * run[:, None]
    own = begins[:, None]
    begin, end = np.where(own, at, end), np.where(own, end, at)
    common, crowd, cover, end_gap = _compare(begin, end, begins, *whole)
    side_most, side_least = _beside(at, inward, blurred)
    marks = (
        np.log(height / noise),
        steps.share[alone[good]],
        np.log(angle),
        run / size,
        np.minimum(least[good] / height, MOST),
        np.minimum(mean[good] / height, MOST),
        np.minimum(lengths.away_px(0.5 * (begin + end)) / size, MOST),
        common,
        np.minimum(crowd, MOST),
        np.minimum(cover / height, MOST),
        end_gap,
        np.minimum(far[good] / height, MOST),
        np.clip(side_most / height, -1.0, MOST),
        np.clip(side_least / height, -1.0, MOST),
        begins,
        np.log(size),
        np.minimum(steps.size[alone[good]] / size, MOST),
        *(np.full(good.size, number) for number in crowded),
    )
    return Lone(begin=begin, end=end, begins=begins, marks=np.stack(marks, axis=1).astype(np.float32))


def _turn_to_ray(
    inward: NDArray[np.float64], sine: NDArray[np.float64], size: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Unit vectors (N, 2), turned towards the ray from the contact point, from which they are off by ``sine``."""
    error = np.minimum(TURN_ERROR_MOST, 1.0 / np.maximum(size, 1.0))
    turn = np.where(np.abs(sine) < TURN_ERRORS * error, sine / (1.0 + (TURN_SPREAD / error) ** 2), 0.0)
    inward = inward - turn[:, None] * np.stack([-inward[:, 1], inward[:, 0]], axis=1)
    return np.asarray(inward / np.hypot(inward[:, 0], inward[:, 1])[:, None])


def _read_along(
    at: NDArray[np.float64],
    inward: NDArray[np.float64],
    size: NDArray[np.float64],
    dark: NDArray[np.float64],
    blurred: NDArray[np.float32],
) -> tuple[NDArray[np.float64], ...]:
    """Of lines from ``at`` along ``inward`` (N, 2) for ``size``: where they fall below ``dark``, or their size; least
    and mean brightness; greatest fall where the other end must be.
    """
    apart = np.where(size > LONG_PX, 2.0, 1.0)
    number = np.maximum(np.ceil(FAR_TO * size / apart).astype(np.int64), 2) + 2 * FAR_BOX
    first = np.cumsum(number) - number
    place = (np.arange(int(number.sum())) - np.repeat(first - 1.0, number)) * np.repeat(apart, number)
    x = np.repeat(at[:, 0], number) + place * np.repeat(inward[:, 0], number)
    y = np.repeat(at[:, 1], number) + place * np.repeat(inward[:, 1], number)
    level = read_levels(blurred, x, y)
    part = place / np.repeat(size, number)
    inner = (place > INNER_PX) & (part <= 1.0)
    run = np.minimum.reduceat(np.where(inner & (level < np.repeat(dark, number)), place, np.inf), first)
    least = np.minimum.reduceat(np.where(inner, level, np.inf), first)
    mean = np.add.reduceat(level * inner, first) / np.maximum(np.add.reduceat(inner, first, dtype=np.int64), 1)
    total = np.concatenate([np.zeros(1), np.cumsum(level, dtype=np.float64)])
    fall = np.zeros(level.size)  # boxes stay within a line: each ends FAR_BOX points beyond FAR_TO
    fall[FAR_BOX:-FAR_BOX] = 2.0 * total[FAR_BOX : -FAR_BOX - 1] - total[: -2 * FAR_BOX - 1] - total[2 * FAR_BOX : -1]
    far = np.maximum.reduceat(np.where((part > FAR_FROM) & (part < FAR_TO), fall, 0.0), first) / FAR_BOX
    return np.minimum(run, size), least, mean, far


def _beside(
    at: NDArray[np.float64], inward: NDArray[np.float64], blurred: NDArray[np.float32]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Heights (N,) of the steps beside steps: the greater and the lesser of left and right."""
    along = np.concatenate([BESIDE_ALONG_PX, -BESIDE_ALONG_PX])
    side = np.repeat((-BESIDE_PX, BESIDE_PX), along.size)
    along = np.tile(along, 2)
    x = at[:, :1] + along * inward[:, :1] - side * inward[:, 1:]
    y = at[:, 1:] + along * inward[:, 1:] + side * inward[:, :1]
    level = read_levels(blurred, x.ravel(), y.ravel()).reshape(len(at), 2, 2, BESIDE_ALONG_PX.size).mean(axis=3)
    rise = level[:, :, 0] - level[:, :, 1]
    return rise.max(axis=1), rise.min(axis=1)


def _compare(
    own_begin: NDArray[np.float64],
    own_end: NDArray[np.float64],
    begins: NDArray[np.bool_],
    begin: NDArray[np.float64],
    end: NDArray[np.float64],
    height: NDArray[np.float64],
) -> tuple[NDArray[np.floating], ...]:
    """Of N lines, of which the step is the begin where ``begins``, against M others: greatest and summed intersection
    over union along the line; height of the others that covers it on average; and how far along the nearest of their
    same ends is from the step (1: END_FAR_PX or more).
    """
    a, b, begin32, end32 = (v.astype(np.float32) for v in (own_begin, own_end, begin, end))
    way = b - a
    own = np.maximum(np.hypot(way[:, 0], way[:, 1]), np.float32(1e-6))[:, None]
    way /= own
    ux, uy = way[:, :1], way[:, 1:]
    ax, ay = a[:, :1], a[:, 1:]
    side = [(p[:, 0] - ax) * uy - (p[:, 1] - ay) * ux for p in (begin32, end32)]
    along = [(p[:, 0] - ax) * ux + (p[:, 1] - ay) * uy for p in (begin32, end32)]
    low, high = np.minimum(*along), np.maximum(*along)
    common = np.maximum(np.minimum(high, own) - np.maximum(low, 0.0), 0.0)
    skew = np.abs(side[1] - side[0]) > SKEW_MOST * (high - low)
    common[(np.abs(side[0] + side[1]) > 2.0 * SAME_SIDE_PX) | skew] = 0.0
    share = common / (np.maximum(high, own) - np.minimum(low, 0.0))
    cover = (common * height.astype(np.float32)).sum(axis=1) / own[:, 0]
    first = begins[:, None]
    gap = np.where(first, np.abs(along[0]), np.abs(along[1] - own))
    gap[np.where(first, np.abs(side[0]), np.abs(side[1])) > END_SIDE_PX] = END_FAR_PX
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
    return np.sort(k[odds[k] - SAME_WEIGHT * _shared(lone.begin[k], lone.end[k]) > ODDS_LEAST])


def follow_arms(
    steps: Steps, alone: NDArray[np.int64], blurred: NDArray[np.float32], noise: float, lengths: Lengths
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Begins and ends (N, 2) px of lines that pass the contact point by, no streaks but perhaps arms of bursts: from
    the steps ``alone`` until it is dark. None while streaks do not come from the contact point as given.
    """
    across = alone[:0]
    if lengths.from_contact:
        across = alone[np.abs(lengths.turn(steps.at[alone], steps.inward[alone])) >= TURN_MOST]
    at, inward, height = steps.at[across], steps.inward[across], steps.height[across]
    size = lengths.typical_px(at)
    run = _read_along(at, inward, size, np.maximum(DARK_NOISE * noise, DARK_SHARE * height), blurred)[0]
    good = np.flatnonzero(run >= np.minimum(LEAST_PX, LEAST_SHARE * size))
    good = good[np.argsort(-run[good], kind="stable")]
    at, end, begins = at[good], at[good] + inward[good] * run[good, None], steps.begins[across[good], None]
    begin, end = np.where(begins, at, end), np.where(begins, end, at)
    apart = _shared(begin, end) < ARMS_SHARE
    return begin[apart], end[apart]


def _shared(begin: NDArray[np.float64], end: NDArray[np.float64]) -> NDArray[np.float64]:
    """Of each line (N,): greatest intersection over union with one before it in the list."""
    gap = end - begin
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
    return np.asarray(np.tril(share, -1).max(axis=1, initial=0.0))
