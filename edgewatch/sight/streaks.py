"""Streaks: a beginning and an end on one line that stays lit between them.

Along each piece of ridge the brightness is read beyond both its ends, and its steps are found by differences of boxes
(Rosenfeld & Thurston, IEEE Trans. Computers C-20, 1971). A step up is where a streak begins, a step down where one
ends; where streaks overlap, brightness adds up and the steps remain. Beginnings and ends are then paired, cheapest
first: on one line, of like height, with the line lit all the way, and about as long as its neighbours (``Lengths``). A
step left alone, because the other end is hidden or fades out, makes a streak as long as is typical there. So a streak
is found whole although others cross it, hide part of it, or run on from its end.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from edgewatch.sight import native
from edgewatch.sight.lengths import Lengths
from edgewatch.sight.native import records
from edgewatch.sight.reading import read_levels
from edgewatch.sight.segments import Segments

BOX_PX = 4
"""Length of the two boxes whose difference is a step (px): twice the width of a streak's own blur."""

BEYOND_PX = 5
"""Steps are looked for this far beyond a piece's ends (px): at the picture's edge ridges end three pixels short."""

STEP_NOISE = 4.0
"""A step is this many deviations of its own noise high."""

STEP_NOISE_GAIN = 0.92
"""Noise of a difference of boxes per noise of a pixel of the blurred picture, whose pixels are correlated."""

STEP_SHARE = 0.16
"""And this share of the brightness on its high side: less is a streak's own unevenness."""

FULL_SHARE = 0.7
"""A step of at least this share of its high side leads from darkness: a streak's own end, with nothing beyond."""

LEARN_NOISE = 8.0
"""Lengths are learnt from streaks whose steps are this many noise deviations high: never from noise, however long the
scene stays dark."""

STREAK_POINTS = 4
"""A piece with fewer ridge points than this has no direction good enough to look for steps along it."""

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

DARK_NOISE = 2.5
DARK_SHARE = 0.15
"""A streak with one end seen runs until it is darker than these noise deviations and this share of its step."""

ALONE_LEAST_PX = 8.0
"""A streak of which one end is seen is at least this long."""

SAME_SIDE_PX = 2.0
SAME_COS = 0.97
SAME_OVERLAP = 0.7
"""A streak with one end seen that runs within another for this share of the shorter is the same. In a crowd streaks do
overlap: less, and wider apart, would take many for one."""

LEVEL_SAMPLES = 12


@dataclass(frozen=True, slots=True, eq=False)
class Steps:
    """Steps along pieces, arrays of length N: ``at`` (N, 2) px; ``inward`` (N, 2) unit vector into the streak;
    ``height`` DN; ``size`` px, length of the piece it lies on; ``begins``: up along the stream;
    ``full``: from darkness.
    """

    at: NDArray[np.float64]
    inward: NDArray[np.float64]
    height: NDArray[np.float64]
    size: NDArray[np.float64]
    begins: NDArray[np.bool_]
    full: NDArray[np.bool_]

    def first(self, count: int) -> Steps:
        """So many of them."""
        return Steps(
            at=self.at[:count],
            inward=self.inward[:count],
            height=self.height[:count],
            size=self.size[:count],
            begins=self.begins[:count],
            full=self.full[:count],
        )


@dataclass(frozen=True, slots=True, eq=False)
class Lines:
    """Streaks, arrays of length N: ``begin``, ``end`` (N, 2) px, the first nearer the wheel along the axis;
    ``level`` DN, height in the blurred picture over the darker third; ``whole``: both ends seen.
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
    steps = find_steps(pieces, blurred, noise, axis)
    pairs = pair_steps(steps, blurred, lengths)
    first = not lengths.known
    full = (steps.full[pairs] & (steps.height[pairs] > LEARN_NOISE * noise)).all(axis=1)
    lengths.learn(steps.at[pairs[full, 0]], steps.at[pairs[full, 1]])
    if first and lengths.known:  # what was just learnt helps the first picture too
        pairs = pair_steps(steps, blurred, lengths)
    return make_lines(steps, pairs, blurred, noise, lengths)


def make_lines(
    steps: Steps, pairs: NDArray[np.int64], blurred: NDArray[np.float32], noise: float, lengths: Lengths
) -> Lines:
    """Streaks from pairs of steps (begin, end), int64 (N, 2), and from the steps left alone."""
    if native.LIBRARY:
        return _make_lines_compiled(steps, pairs, blurred, noise, lengths)
    alone_begin, alone_end = _complete(steps, pairs, blurred, noise, lengths)
    begin = np.concatenate([steps.at[pairs[:, 0]], alone_begin])
    end = np.concatenate([steps.at[pairs[:, 1]], alone_end])
    whole = np.arange(len(begin)) < len(pairs)
    keep = _distinct(begin, end, whole)
    begin, end, whole = begin[keep], end[keep], whole[keep]
    return Lines(begin=begin, end=end, level=_line_levels(begin, end, blurred), whole=whole)


def find_steps(pieces: Segments, blurred: NDArray[np.float32], noise: float, axis: tuple[float, float]) -> Steps:
    """Steps along every piece. All pieces are laid end to end into one row, so that sums run over them together."""
    if native.LIBRARY:
        return _find_steps_compiled(pieces, blurred, noise, axis)
    long = np.flatnonzero(pieces.points >= STREAK_POINTS)
    along_axis = pieces.axis[long] @ np.asarray(axis)
    heading = np.where(along_axis < 0.0, -1.0, 1.0)[:, None] * pieces.axis[long]
    start = np.where(along_axis[:, None] < 0.0, pieces.end[long], pieces.begin[long])
    length = pieces.length[long]
    margin = BEYOND_PX + 2 * BOX_PX
    size = np.ceil(length).astype(np.int64) + 1 + 2 * margin
    first = np.cumsum(size) - size
    owner = np.repeat(np.arange(long.size), size)
    place = np.arange(owner.size) - np.repeat(first + float(margin), size)
    x = np.repeat(start[:, 0], size) + np.repeat(heading[:, 0], size) * place
    y = np.repeat(start[:, 1], size) + np.repeat(heading[:, 1], size) * place
    total = np.concatenate([np.zeros(1), np.cumsum(read_levels(blurred, x, y), dtype=np.float64)])
    ahead, behind = np.zeros(owner.size), np.zeros(owner.size)
    ahead[: -BOX_PX - 1] = (total[BOX_PX + 1 : -1] - total[1 : -BOX_PX - 1]) / BOX_PX
    behind[BOX_PX:] = (total[BOX_PX:-1] - total[: -BOX_PX - 1]) / BOX_PX
    rise = ahead - behind
    height, high = np.abs(rise), np.maximum(ahead, behind)
    inside = (place >= -BEYOND_PX) & (place <= np.repeat(length + BEYOND_PX, size))
    found = np.flatnonzero(inside & (height > np.maximum(STEP_NOISE * STEP_NOISE_GAIN * noise, STEP_SHARE * high)))
    peak = np.ones(found.size, np.bool_)
    for aside in (-3, -2, -1, 1, 2, 3):  # margins keep the neighbours within the same piece
        peak &= height[found] >= rise[found + aside] * np.sign(rise[found])
    found = found[peak]
    begins = rise[found] > 0.0
    # A parabola through the rise and its neighbours puts the step between pixels.
    before, here, after = height[found - 1], height[found], height[found + 1]
    shift = np.clip(0.5 * (before - after) / np.minimum(before - 2.0 * here + after, -1e-9), -0.5, 0.5)
    own = heading[owner[found]]
    return Steps(
        at=np.stack([x[found] + shift * own[:, 0], y[found] + shift * own[:, 1]], axis=1),
        inward=heading[owner[found]] * np.where(begins, 1.0, -1.0)[:, None],
        height=height[found],
        size=length[owner[found]],
        begins=begins,
        full=height[found] > FULL_SHARE * high[found],
    )


def _find_steps_compiled(
    pieces: Segments, blurred: NDArray[np.float32], noise: float, axis: tuple[float, float]
) -> Steps:
    rules = records.StepRules(
        least_height=STEP_NOISE * STEP_NOISE_GAIN * noise,
        share=STEP_SHARE,
        full_share=FULL_SHARE,
        least_points=STREAK_POINTS,
        beyond_px=BEYOND_PX,
        box_px=BOX_PX,
    )
    columns = (pieces.begin, pieces.end, pieces.axis, pieces.length, pieces.points)
    room = 4 * pieces.length.size + 16
    while True:
        places, values, flags = np.empty((2, room, 2)), np.empty((2, room)), np.empty((2, room), np.bool_)
        steps = Steps(at=places[0], inward=places[1], height=values[0], size=values[1], begins=flags[0], full=flags[1])
        found = native.LIBRARY.edgewatch_steps(
            pieces.length.size,
            *map(native.place, columns),
            *map(native.double, axis),
            native.reference(records.picture(blurred)),
            native.reference(rules),
            native.reference(_record(steps)),
            room,
        )
        if native.enough(found, room):
            return steps.first(found)
        room = found


def _record(steps: Steps) -> records.Steps:
    columns = (steps.at, steps.inward, steps.height, steps.size, steps.begins, steps.full)
    return records.Steps(*map(native.place, columns))


def pair_steps(steps: Steps, blurred: NDArray[np.float32], lengths: Lengths) -> NDArray[np.int64]:
    """Pairs (begin, end) of steps that make a streak, int64 (N, 2)."""
    if native.LIBRARY:
        return _pair_steps_compiled(steps, blurred, lengths)
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


_PAIR_RULES = records.PairRules(
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
    dark_most=DARK_MOST,
)


def _pair_steps_compiled(steps: Steps, blurred: NDArray[np.float32], lengths: Lengths) -> NDArray[np.int64]:
    pairs = np.empty((steps.height.size // 2, 2), np.int64)
    found = native.LIBRARY.edgewatch_pairs(
        steps.height.size,
        native.reference(_record(steps)),
        native.reference(records.picture(blurred)),
        native.reference(lengths.record()),
        native.reference(_PAIR_RULES),
        native.place(pairs),
    )
    native.enough(found, len(pairs))
    return pairs[:found]


def _make_lines_compiled(
    steps: Steps, pairs: NDArray[np.int64], blurred: NDArray[np.float32], noise: float, lengths: Lengths
) -> Lines:
    rules = records.LineRules(
        dark_dn=DARK_NOISE * noise,
        dark_share=DARK_SHARE,
        long_px=LONG_PX,
        alone_least_px=ALONE_LEAST_PX,
        same_side_px=SAME_SIDE_PX,
        same_cos=SAME_COS,
        same_overlap=SAME_OVERLAP,
        level_samples=LEVEL_SAMPLES,
    )
    room = steps.height.size
    ends, level, whole = np.empty((2, room, 2)), np.empty(room), np.empty(room, np.bool_)
    found = native.LIBRARY.edgewatch_lines(
        room,
        native.reference(_record(steps)),
        len(pairs),
        native.place(pairs),
        native.reference(records.picture(blurred)),
        native.reference(lengths.record()),
        native.reference(rules),
        native.place(ends),
        native.place(ends, 2 * room),
        native.place(level),
        native.place(whole),
    )
    native.enough(found, room)
    return Lines(begin=ends[0, :found], end=ends[1, :found], level=level[:found], whole=whole[:found])


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


def _complete(
    steps: Steps, pairs: NDArray[np.int64], blurred: NDArray[np.float32], noise: float, lengths: Lengths
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Streaks (begins, ends) of the steps left alone: as long as is typical there, or until it is dark."""
    alone = np.ones(steps.height.size, np.bool_)
    alone[pairs.ravel()] = False
    k = np.flatnonzero(alone)
    if not lengths.known or not k.size:
        return np.zeros((0, 2)), np.zeros((0, 2))
    at, inward = steps.at[k], steps.inward[k]
    size = lengths.typical_px(at)
    size = lengths.typical_px(at + 0.5 * size[:, None] * inward)
    apart = np.where(size > LONG_PX, 2.0, 1.0)
    number = np.maximum(np.ceil(size / apart).astype(np.int64), 2)
    first = np.cumsum(number) - number
    place = (np.arange(int(number.sum())) - np.repeat(first - 1.0, number)) * np.repeat(apart, number)
    x = np.repeat(at[:, 0], number) + place * np.repeat(inward[:, 0], number)
    y = np.repeat(at[:, 1], number) + place * np.repeat(inward[:, 1], number)
    level = np.maximum(DARK_NOISE * noise, DARK_SHARE * steps.height[k])
    dark = (read_levels(blurred, x, y) < np.repeat(level, number)) & (place > 2.0)
    run = np.minimum(np.minimum.reduceat(np.where(dark, place, np.inf), first), size)
    end = at + inward * run[:, None]
    begins = steps.begins[k, None]
    good = run >= np.minimum(ALONE_LEAST_PX, 0.6 * size)
    return np.where(begins, at, end)[good], np.where(begins, end, at)[good]


def _distinct(begin: NDArray[np.float64], end: NDArray[np.float64], whole: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Lines to keep: of two that run within each other the one seen whole, or the longer; two seen whole both stay."""
    keep = np.ones(len(begin), np.bool_)
    part = np.flatnonzero(~whole)
    if not part.size:
        return keep
    begin, end = begin.astype(np.float32), end.astype(np.float32)
    gap = end - begin
    length = np.maximum(np.hypot(gap[:, 0], gap[:, 1]), np.float32(1e-6))
    unit = gap / length[:, None]
    middle = 0.5 * (begin + end)
    own = length[part][:, None]
    ux, uy = unit[part, 0][:, None], unit[part, 1][:, None]
    bx, by = begin[part, 0][:, None], begin[part, 1][:, None]
    same = np.abs((middle[:, 0] - bx) * uy - (middle[:, 1] - by) * ux) < SAME_SIDE_PX
    i, j = np.nonzero(same)  # few are left: the rest is done pair by pair
    ux, uy, bx, by = ux[i, 0], uy[i, 0], bx[i, 0], by[i, 0]
    a = (begin[j, 0] - bx) * ux + (begin[j, 1] - by) * uy
    b = (end[j, 0] - bx) * ux + (end[j, 1] - by) * uy
    common = np.minimum(np.maximum(a, b), own[i, 0]) - np.maximum(np.minimum(a, b), 0.0)
    held = common > SAME_OVERLAP * np.minimum(own[i, 0], length[j])
    held &= np.abs(ux * unit[j, 0] + uy * unit[j, 1]) > SAME_COS
    rank = np.where(whole, np.float32(np.inf), length)
    k = part[i]
    held &= (rank[j] > rank[k]) | ((rank[j] == rank[k]) & (j < k))
    keep[k[held]] = False
    return keep


def _line_levels(
    begin: NDArray[np.float64], end: NDArray[np.float64], blurred: NDArray[np.float32]
) -> NDArray[np.float64]:
    """Height along each line, the lower third of samples left out: what overlaps it counts little."""
    share = (np.arange(LEVEL_SAMPLES) + 0.5) / LEVEL_SAMPLES
    x = begin[:, :1] + share * (end - begin)[:, :1]
    y = begin[:, 1:] + share * (end - begin)[:, 1:]
    level = read_levels(blurred, x.ravel(), y.ravel()).reshape(x.shape)
    return np.partition(level, LEVEL_SAMPLES // 3, axis=1)[:, LEVEL_SAMPLES // 3].astype(np.float64)
