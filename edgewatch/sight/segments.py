"""Straight pieces of ridge: ridge points linked to their neighbours where direction and position agree.

Two lines that cross keep apart, because the points of one do not lie along the direction of the other. What becomes of
the pieces left and right of a crossing is not decided here.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from edgewatch.sight import native
from edgewatch.sight.ridges import Ridges

LINK_OFFSETS = ((1, 0), (-1, 1), (0, 1), (1, 1), (2, 0), (-2, 1), (2, 1), (-1, 2), (0, 2), (1, 2))
"""Neighbours (dx, dy) that a ridge point may be linked to: half of the 5 x 5 pixels about it,
but for the corners, which add nothing. The compiled form has them as constants."""

LINK_COS = 0.92
"""Least cosine between the directions of linked points: 23 degrees, the direction noise at the threshold."""

LINK_OFFSET_PX = 0.8
"""Each point lies within this of the other's line (px)."""

LEAST_POINTS = 3
"""A segment has at least this many ridge points: two always lie on a line."""


@dataclass(frozen=True, slots=True, eq=False)
class Segments:
    """Straight pieces, arrays of length N: ``begin``, ``end`` float64 (N, 2) px; ``axis`` float64 (N, 2) unit vector
    from begin to end; ``length`` float64 px; ``height`` float64 mean blurred height (DN); ``bend`` float64 mean bend
    (DN/px²); ``points`` int64 ridge points; ``spread`` float64 rms distance of points from the line (px).
    """

    begin: NDArray[np.float64]
    end: NDArray[np.float64]
    axis: NDArray[np.float64]
    length: NDArray[np.float64]
    height: NDArray[np.float64]
    bend: NDArray[np.float64]
    points: NDArray[np.int64]
    spread: NDArray[np.float64]


def find_segments(ridges: Ridges, scratch: NDArray[np.int32]) -> Segments:
    """Straight pieces of ridge. ``scratch``: int32 (H*W,), all -1; returned so."""
    if native.LIBRARY and ridges.columns is not None:
        return _find_compiled(ridges, ridges.columns)
    return fit_segments(ridges, link_ridges(ridges, scratch))


def _find_compiled(ridges: Ridges, columns: NDArray[np.float32]) -> Segments:
    count = ridges.index.size
    room = count // LEAST_POINTS + 1
    work, numbers = np.empty((3, max(1, count)), np.int32), np.empty(room, np.int64)
    ends, values = np.empty((3, room, 2)), np.empty((4, room))
    found = native.LIBRARY.edgewatch_segments(
        count,
        native.start(ridges.index),
        native.start(columns),
        columns.shape[1],
        ridges.blurred.shape[1],
        native.single(LINK_COS),
        native.single(LINK_OFFSET_PX),
        LEAST_POINTS,
        native.start(work),
        native.start(ends),
        native.start(values),
        native.start(numbers),
        room,
    )
    native.enough(found, room)
    length, height, bend, spread = values[:, :found]
    return Segments(
        begin=ends[0, :found],
        end=ends[1, :found],
        axis=ends[2, :found],
        length=length,
        height=height,
        bend=bend,
        points=numbers[:found],
        spread=spread,
    )


def link_ridges(ridges: Ridges, scratch: NDArray[np.int32]) -> NDArray[np.int64]:
    """Label of each ridge point, int64 (N,). ``scratch``: int32 (H*W,), all -1; returned so."""
    count = ridges.index.size
    width = ridges.blurred.shape[1]
    scratch[ridges.index] = np.arange(count, dtype=np.int32)
    offsets = np.asarray([dy * width + dx for dx, dy in LINK_OFFSETS])
    other = scratch.take(ridges.index + offsets[:, None]).ravel()
    scratch[ridges.index] = -1
    found = np.flatnonzero(other >= 0)
    i, j = found % max(count, 1), other.take(found).astype(np.int64)
    ci, si, cj, sj = ridges.cos.take(i), ridges.sin.take(i), ridges.cos.take(j), ridges.sin.take(j)
    gx, gy = ridges.x.take(j) - ridges.x.take(i), ridges.y.take(j) - ridges.y.take(i)
    good = np.abs(ci * cj + si * sj) >= LINK_COS
    good &= np.abs(gx * si - gy * ci) <= LINK_OFFSET_PX
    good &= np.abs(gx * sj - gy * cj) <= LINK_OFFSET_PX
    return label_components(i[good], j[good], count)


def label_components(i: NDArray[np.int64], j: NDArray[np.int64], count: int) -> NDArray[np.int64]:
    """Label of each of ``count`` points, int64 (count,), 0 upwards: points joined by pairs ``i`` < ``j`` share one.

    Each point hangs from one later point and pointers are doubled up to the last of its chain (Shiloach & Vishkin, J.
    Algorithms 3, 1982); pairs between chains then hang one chain's last point from the other's, until none is left.
    Ridges are chains to begin with, so this takes less than half of the time that a general graph takes.
    """
    last = np.arange(count)
    while i.size:
        last[i] = j
        beyond = last.take(last)
        while not np.array_equal(beyond, last):
            last, beyond = beyond, beyond.take(beyond)
        a, b = last.take(i), last.take(j)
        apart = np.flatnonzero(a != b)
        a, b = a.take(apart), b.take(apart)
        i, j = np.minimum(a, b), np.maximum(a, b)
    number = np.cumsum(last == np.arange(count)) - 1
    label: NDArray[np.int64] = number.take(last)
    return label


def fit_segments(ridges: Ridges, label: NDArray[np.int64]) -> Segments:
    """One straight line through the points of each label (total least squares); labels with few points are dropped."""
    # numpy sorts 16-bit integers by radix, several times faster
    order = np.argsort(label.astype(np.uint16) if label.size < 65536 else label, kind="stable")
    n = np.bincount(label)
    # only points of labels with enough of them, each label's together
    order = order[np.repeat(n >= LEAST_POINTS, n)]
    n = n[n >= LEAST_POINTS]
    first = np.cumsum(n) - n
    x, y = ridges.x.take(order).astype(np.float64), ridges.y.take(order).astype(np.float64)
    columns = (x, y, x * x, y * y, x * y, ridges.height.take(order), ridges.bend.take(order))
    sums = np.add.reduceat(np.stack(columns), first, axis=1) if n.size else np.zeros((len(columns), 0))
    mx, my, sxx, syy, sxy, height, bend = sums / n
    sxx, syy, sxy = sxx - mx * mx, syy - my * my, sxy - mx * my
    angle = 0.5 * np.arctan2(2.0 * sxy, sxx - syy)
    c, s = np.cos(angle), np.sin(angle)
    along = x * np.repeat(c, n) + y * np.repeat(s, n)
    middle = mx * c + my * s
    low = (np.minimum.reduceat(along, first) if n.size else np.zeros(0)) - middle
    high = (np.maximum.reduceat(along, first) if n.size else np.zeros(0)) - middle
    across = np.maximum(0.0, 0.5 * (sxx + syy) - np.hypot(0.5 * (sxx - syy), sxy))
    return Segments(
        begin=np.stack([mx + c * low, my + s * low], axis=1),
        end=np.stack([mx + c * high, my + s * high], axis=1),
        axis=np.stack([c, s], axis=1),
        length=high - low,
        height=height,
        bend=bend,
        points=n,
        spread=np.sqrt(across),
    )
