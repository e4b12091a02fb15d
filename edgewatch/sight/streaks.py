"""Streaks: a beginning and an end on one line that stays lit between them.

Beginnings and ends (``steps``) are paired, cheapest first: on one line, of like height, with the line lit all the way,
and about as long as its neighbours (``Lengths``). A step left alone, because the other end is hidden or fades out, may
still be the end of a streak as long as is typical there (``lone``). So a streak is found whole although others cross
it, hide part of it, or run on from its end.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from edgewatch.sight import lengths as lengths_of
from edgewatch.sight import lone as lone_of
from edgewatch.sight import native
from edgewatch.sight import steps as steps_of
from edgewatch.sight.lengths import Lengths
from edgewatch.sight.lone import find_lone
from edgewatch.sight.native import records
from edgewatch.sight.reading import read_levels
from edgewatch.sight.segments import Segments
from edgewatch.sight.steps import FULL_SHARE, Steps, find_steps

LEARN_NOISE = 8.0
"""Lengths are learnt from streaks whose steps are this many noise deviations high: never from noise, however long the
scene stays dark."""

SIDE_PX = 1.6
SIDE_TAN = 0.12
"""A step lies within SIDE_PX of the other's line, and more by the error of that line's direction: half a pixel over
the piece's length, at most SIDE_TAN."""

LEAST_RUN_PX = 3.0
RATIO_LOG = 0.35
FADE_PX = 150.0
"""Logarithm of the ratio between the heights of a streak's two steps: error, and fading along the way."""

RATIO_MOST = 2.5
PATH_SHARE = 0.35
"""Between its steps a streak is brighter than this share of the lower one."""

DARK_MOST = 1
LONG_PX = 48.0
"""Points along a streak that may be darker; they lie a pixel apart, on streaks longer than this two."""

LENGTH_COST_FULL = 4.0
LENGTH_COST_MOST = 16.0
"""Greatest cost of an unusual length; the first where both ends lead from darkness: short streaks exist."""

COST_MOST = 9.0
"""Pairs dearer than this are none: three standard deviations."""

LEVEL_SAMPLES = 12

PAIR_RULES = records.PairRules(
    side_px=SIDE_PX,
    side_tan=SIDE_TAN,
    least_run_px=LEAST_RUN_PX,
    ratio_log=RATIO_LOG,
    fade_px=FADE_PX,
    ratio_most=RATIO_MOST,
    path_share=PATH_SHARE,
    long_px=LONG_PX,
    cost_full=LENGTH_COST_FULL,
    cost_most=LENGTH_COST_MOST,
    pair_most=COST_MOST,
    full_share=FULL_SHARE,
    dark_most=DARK_MOST,
)
_RULES = native.reference(
    records.StreakRules(
        steps=steps_of.RULES,
        pairs=PAIR_RULES,
        lengths=lengths_of.RULES,
        lone=lone_of.RULES,
        net=lone_of.NET,
        learn_noise=LEARN_NOISE,
        level_samples=LEVEL_SAMPLES,
    )
)
"""All of this for the compiled form."""


@dataclass(frozen=True, slots=True, eq=False)
class Lines:
    """Streaks, arrays of length N: ``begin``, ``end`` (N, 2) px, the first nearer the wheel along the axis;
    ``level`` DN, height in the blurred picture over the darker third; ``whole``: both ends seen. Lines
    across the stream are among them: arms of bursts, which ``glow`` tells from streaks.
    """

    begin: NDArray[np.float64]
    end: NDArray[np.float64]
    level: NDArray[np.float64]
    whole: NDArray[np.bool_]


def find_streaks(
    pieces: Segments,
    blurred: NDArray[np.float32],
    noise: float,
    lengths: Lengths,
    axis: tuple[float, float],
) -> Lines:
    """Streaks of one picture. ``blurred``: float32 (H, W) from the ridge detector, ``noise``: its noise (DN);
    ``lengths`` learns from what is found; ``axis``: unit vector of the stream.
    """
    if native.LIBRARY:
        return _find_compiled(pieces, blurred, noise, lengths, axis)
    steps = find_steps(pieces, blurred, noise, axis)
    pairs = pair_steps(steps, blurred, lengths)
    first = not lengths.known
    full = (steps.full[pairs] & (steps.height[pairs] > LEARN_NOISE * noise)).all(axis=1)
    lengths.learn(steps.at[pairs[full, 0]], steps.at[pairs[full, 1]])
    if first and lengths.known:  # what was just learnt helps the first picture too
        pairs = pair_steps(steps, blurred, lengths)
    lone_begin, lone_end = find_lone(steps, pairs, blurred, noise, lengths)
    begin = np.concatenate([steps.at[pairs[:, 0]], lone_begin])
    end = np.concatenate([steps.at[pairs[:, 1]], lone_end])
    whole = np.arange(len(begin)) < len(pairs)
    return Lines(begin=begin, end=end, level=_line_levels(begin, end, blurred), whole=whole)


def _find_compiled(
    pieces: Segments,
    blurred: NDArray[np.float32],
    noise: float,
    lengths: Lengths,
    axis: tuple[float, float],
) -> Lines:
    columns = [native.start(one) for one in (pieces.begin, pieces.end, pieces.axis, pieces.length, pieces.points)]
    room = 4 * pieces.length.size + 16
    while True:
        (begin, end), level, whole = np.empty((2, room, 2)), np.empty(room), np.empty(room, np.bool_)
        found = native.LIBRARY.edgewatch_streaks(
            pieces.length.size,
            *columns,
            native.place(blurred),
            *blurred.shape,
            native.double(noise),
            *map(native.double, axis),
            native.reference(lengths.memory),
            _RULES,
            room,
            *map(native.start, (begin, end, level, whole)),
        )
        if native.enough(found, room):
            return Lines(begin=begin[:found], end=end[:found], level=level[:found], whole=whole[:found])
        room = found


def pair_steps(steps: Steps, blurred: NDArray[np.float32], lengths: Lengths) -> NDArray[np.int64]:
    """Pairs (begin, end) of steps that make a streak, int64 (N, 2)."""
    begins, ends = np.flatnonzero(steps.begins), np.flatnonzero(~steps.begins)
    none = np.zeros((0, 2), np.int64)
    if not begins.size or not ends.size:
        return none
    at, way = steps.at.astype(np.float32), np.where(steps.begins[:, None], 1, -1).astype(np.float32) * steps.inward
    way = way.astype(np.float32)
    gx = at[ends, 0][None] - at[begins, 0][:, None]
    gy = at[ends, 1][None] - at[begins, 1][:, None]
    run = gx * way[begins, 0][:, None] + gy * way[begins, 1][:, None]
    tangent = np.minimum(SIDE_TAN, 1.0 / np.maximum(steps.size, 1.0)).astype(np.float32)
    near = (run > LEAST_RUN_PX) & (run < lengths.longest_px)
    near &= (
        np.abs(gx * way[begins, 1][:, None] - gy * way[begins, 0][:, None]) < SIDE_PX + run * tangent[begins][:, None]
    )
    row, column = np.nonzero(near)
    b, e = begins[row], ends[column]
    run = run[row, column]
    gx, gy = gx[row, column], gy[row, column]
    side_b = np.abs(gx * way[b, 1] - gy * way[b, 0]) / (SIDE_PX + run * tangent[b])
    side_e = np.abs(gx * way[e, 1] - gy * way[e, 0]) / (SIDE_PX + run * tangent[e])
    ratio = np.abs(np.log(steps.height[b] / steps.height[e]))
    cost = side_b**2 + side_e**2 + (ratio / (RATIO_LOG + run / FADE_PX)) ** 2
    if lengths.known:
        off = lengths.deviation(0.5 * (steps.at[b] + steps.at[e]), run) ** 2
        cost = cost + np.minimum(off, np.where(steps.full[b] & steps.full[e], LENGTH_COST_FULL, LENGTH_COST_MOST))
    good = np.flatnonzero((side_e < 1.0) & (ratio < RATIO_MOST) & (cost < COST_MOST))
    b, e, cost = b[good], e[good], cost[good]
    lit = _stay_lit(steps.at[b], steps.at[e], PATH_SHARE * np.minimum(steps.height[b], steps.height[e]), blurred)
    b, e, cost = b[lit], e[lit], cost[lit]
    chosen = _cheapest(b, e, cost, steps.height.size)
    return np.stack([b[chosen], e[chosen]], axis=1)


def _stay_lit(
    a: NDArray[np.float64], b: NDArray[np.float64], level: NDArray[np.float64], blurred: NDArray[np.float32]
) -> NDArray[np.bool_]:
    """Whether the line from each a to its b is brighter than ``level`` all the way, but for a point."""
    gap = b - a
    length = np.hypot(gap[:, 0], gap[:, 1])
    size = np.maximum(np.ceil((length - 4.0) / np.where(length > LONG_PX, 2.0, 1.0)), 1.0).astype(np.int64)
    inner = np.minimum(2.0 / length, 0.4)  # near its ends a line is half lit by its own blur
    apart, first = (1.0 - 2.0 * inner) / size, np.cumsum(size) - size
    place = np.arange(int(size.sum())) * np.repeat(apart, size) + np.repeat(inner + (0.5 - first) * apart, size)
    x = np.repeat(a[:, 0], size) + place * np.repeat(gap[:, 0], size)
    y = np.repeat(a[:, 1], size) + place * np.repeat(gap[:, 1], size)
    dark = read_levels(blurred, x, y) < np.repeat(level, size)
    return np.asarray(np.add.reduceat(dark, first, dtype=np.int64) <= DARK_MOST) if size.size else dark


def _cheapest(i: NDArray[np.int64], j: NDArray[np.int64], cost: NDArray[np.float64], count: int) -> NDArray[np.int64]:
    """Rows of the pairs taken, each index used once: rounds of mutually cheapest pairs; few rounds are needed."""
    cost = cost + 1e-9 * np.arange(cost.size)  # no ties: every round takes at least one pair
    alive = np.arange(i.size)
    chosen = [alive[:0]]
    while alive.size:
        best = np.full(count, np.inf)
        np.minimum.at(best, i[alive], cost[alive])
        np.minimum.at(best, j[alive], cost[alive])
        taken = alive[(cost[alive] <= best[i[alive]]) & (cost[alive] <= best[j[alive]])]
        chosen.append(taken)
        used = np.zeros(count, np.bool_)
        used[i[taken]] = used[j[taken]] = True
        alive = alive[~(used[i[alive]] | used[j[alive]])]
    return np.sort(np.concatenate(chosen))


def _line_levels(
    begin: NDArray[np.float64], end: NDArray[np.float64], blurred: NDArray[np.float32]
) -> NDArray[np.float64]:
    """Height along each line, the lower third of samples left out: what overlaps it counts little."""
    share = (np.arange(LEVEL_SAMPLES) + 0.5) / LEVEL_SAMPLES
    x = begin[:, :1] + share * (end - begin)[:, :1]
    y = begin[:, 1:] + share * (end - begin)[:, 1:]
    level = read_levels(blurred, x.ravel(), y.ravel()).reshape(x.shape)
    return np.partition(level, LEVEL_SAMPLES // 3, axis=1)[:, LEVEL_SAMPLES // 3].astype(np.float64)
