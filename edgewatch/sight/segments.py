"""Straight pieces of ridge: ridge points linked to their neighbours where direction and position agree.

Two lines that cross keep apart, because the points of one do not lie along the direction of the other; the pieces
left of and right of a crossing are joined afterwards by ``join_segments`` when they lie on one line and the gap is lit.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_matrix
from scipy.sparse.csgraph import connected_components
from scipy.spatial import cKDTree

from edgewatch.sight.ridges import Ridges

LINK_OFFSETS = ((1, 0), (-1, 1), (0, 1), (1, 1), (2, 0), (-2, 1), (2, 1), (-1, 2), (0, 2), (1, 2), (-2, 2), (2, 2))
"""Neighbours (dx, dy) that a ridge point may be linked to: half of the 5 x 5 pixels about it."""

LINK_COS = 0.92
"""Least cosine between the directions of linked points: 23 degrees, the direction noise at the threshold."""

LINK_OFFSET_PX = 0.8
"""Each point lies within this of the other's line (px)."""

LEAST_POINTS = 4
"""A segment has at least this many ridge points."""


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


def link_ridges(ridges: Ridges, scratch: NDArray[np.int32]) -> NDArray[np.int32]:
    """Label of each ridge point, int32 (N,). ``scratch``: int32 (H*W,), all -1; returned so."""
    count = ridges.index.size
    width = ridges.blurred.shape[1]
    scratch[ridges.index] = np.arange(count, dtype=np.int32)
    ones: list[NDArray[np.int64]] = []
    others: list[NDArray[np.int64]] = []
    for dx, dy in LINK_OFFSETS:
        other = scratch.take(ridges.index + (dy * width + dx))
        one = np.flatnonzero(other >= 0)
        ones.append(one)
        others.append(other[one])
    scratch[ridges.index] = -1
    i, j = np.concatenate(ones), np.concatenate(others)
    ci, si, cj, sj = ridges.cos[i], ridges.sin[i], ridges.cos[j], ridges.sin[j]
    gx, gy = ridges.x[j] - ridges.x[i], ridges.y[j] - ridges.y[i]
    good = np.abs(ci * cj + si * sj) >= LINK_COS
    good &= np.abs(gx * si - gy * ci) <= LINK_OFFSET_PX
    good &= np.abs(gx * sj - gy * cj) <= LINK_OFFSET_PX
    i, j = i[good], j[good]
    graph = coo_matrix((np.ones(i.size, np.int8), (i, j)), shape=(count, count))
    return np.asarray(connected_components(graph, directed=False)[1])


def fit_segments(ridges: Ridges, label: NDArray[np.int32], weight: NDArray[np.float32] | None = None) -> Segments:
    """One straight line through the points of each label (total least squares); labels with few points are dropped."""
    count = int(label.max()) + 1 if label.size else 0
    n = np.bincount(label, minlength=count)
    x, y = ridges.x.astype(np.float64), ridges.y.astype(np.float64)
    safe = np.maximum(n, 1)
    mx, my = np.bincount(label, x, count) / safe, np.bincount(label, y, count) / safe
    u, v = x - mx[label], y - my[label]
    sxx, syy = np.bincount(label, u * u, count), np.bincount(label, v * v, count)
    sxy = np.bincount(label, u * v, count)
    angle = 0.5 * np.arctan2(2.0 * sxy, sxx - syy)
    c, s = np.cos(angle), np.sin(angle)
    along = u * c[label] + v * s[label]
    order = np.argsort(label, kind="stable")
    starts = np.concatenate(([0], np.cumsum(n)[:-1])) if count else np.zeros(0, np.int64)
    low = np.minimum.reduceat(along[order], starts) if count else np.zeros(0)
    high = np.maximum.reduceat(along[order], starts) if count else np.zeros(0)
    across = np.maximum(0.0, 0.5 * (sxx + syy) - np.hypot(0.5 * (sxx - syy), sxy))
    keep = n >= LEAST_POINTS
    axis = np.stack([c, s], axis=1)
    middle = np.stack([mx, my], axis=1)
    return Segments(
        begin=(middle + axis * low[:, None])[keep],
        end=(middle + axis * high[:, None])[keep],
        axis=axis[keep],
        length=(high - low)[keep],
        height=(np.bincount(label, ridges.height, count) / safe)[keep],
        bend=(np.bincount(label, ridges.bend, count) / safe)[keep],
        points=n[keep],
        spread=np.sqrt(across / safe)[keep],
    )


JOIN_GAP_PX = 12.0
"""Widest gap that is bridged (px): a crossing at a shallow angle hides this much of a line."""

JOIN_COS = 0.966
"""Pieces of one line differ by less than 15 degrees in direction; short ones carry that much error."""

JOIN_OFFSET_PX = 1.5
"""The end of each piece lies within this of the other's line (px)."""


def join_segments(segments: Segments, blurred: NDArray[np.float32], threshold: float) -> NDArray[np.int32]:
    """Which segments are pieces of one line: label of each, int32 (N,)."""
    count = segments.length.size
    if count < 2:
        return np.zeros(count, np.int32)
    ends = np.concatenate([segments.begin, segments.end])
    out = np.concatenate([-segments.axis, segments.axis])
    pairs = cKDTree(ends).query_pairs(JOIN_GAP_PX, output_type="ndarray")
    i, j = pairs[:, 0], pairs[:, 1]
    gap = ends[j] - ends[i]
    facing = -(out[i] * out[j]).sum(axis=1)
    side_i = np.abs(gap[:, 0] * out[i, 1] - gap[:, 1] * out[i, 0])
    side_j = np.abs(gap[:, 0] * out[j, 1] - gap[:, 1] * out[j, 0])
    ahead = (gap * out[i]).sum(axis=1)
    good = (i % count != j % count) & (facing >= JOIN_COS) & (np.maximum(side_i, side_j) <= JOIN_OFFSET_PX)
    good &= ahead > -2.0
    i, j, side = i[good], j[good], np.maximum(side_i, side_j)[good] + 2.0 * np.sqrt(1.0 - facing[good].clip(0, 1) ** 2)
    lit = np.ones(i.size, np.bool_)
    for share in (0.25, 0.5, 0.75):
        at = np.rint(ends[i] + share * (ends[j] - ends[i])).astype(np.int64)
        lit &= blurred[at[:, 1], at[:, 0]] > threshold
    i, j, side = i[lit], j[lit], side[lit]
    cost = side + 0.1 * np.hypot(*(ends[j] - ends[i]).T)
    best = np.full(2 * count, np.inf)
    np.minimum.at(best, i, cost)
    np.minimum.at(best, j, cost)
    mutual = (cost <= best[i]) & (cost <= best[j])
    i, j = i[mutual] % count, j[mutual] % count
    graph = coo_matrix((np.ones(i.size, np.int8), (i, j)), shape=(count, count))
    return np.asarray(connected_components(graph, directed=False)[1])
