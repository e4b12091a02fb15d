"""Candidates for bursts: points of a picture that are worth a closer look.

Three kinds: points where lines of pieces of ridge meet beyond their ends (a Hough transform for points: every pair of
pieces votes for its intersection), points from which brightness falls off in every direction, and places where much
light is gathered and no candidate of the other kinds is near.
"""

from __future__ import annotations

from typing import Any

import cv2
import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from edgewatch.sight import native
from edgewatch.sight.native import records
from edgewatch.sight.ridges import Ridges
from edgewatch.sight.segments import Segments

_cv: Any = cv2

GAP_PX = 20.0
"""Farthest that a piece's line is followed towards a meeting point (px)."""

INNER_PX = 4.0
"""How far a meeting point may lie within a piece (px): arms overlap near their burst."""

GAP_LENGTHS = 3.0
"""And no farther than this many lengths of the piece: a short piece's direction is not known better."""

LEAST_SIN = 0.2
"""Pieces that meet differ in direction by at least this sine (12 degrees): else the meeting point is not determined."""

CELL_PX = 4.0
CELL_BLUR = 0.7
"""Side of the cells in which meeting points are counted (px), and blur of the count (cells)."""

LEAST_VOTES = 0.25
"""Count after the blur that makes a candidate: one meeting point, which the blur leaves a third of."""

BLOB_STEPS = ((2, 0), (1, 1), (0, 2), (1, -1))
BLOB_FALL = 0.13
"""At these steps either way (dx, dy in a picture of half the size, three to four pixels long) brightness has fallen by
this share; along a streak it has not."""

BLOB_NOISE = 11.0
"""A blob stands this many deviations of the blurred picture's noise above the background."""

LIGHT_CELL_PX = 4
LIGHT_NOISE = 5.0
LIGHT_APART_PX = 5.0
"""Candidates, too, are places where much light is gathered: maxima of the excess in cells of this side (px), softened
over five of them, which stand so many noise deviations above the ground and are this far from candidates of the other
kinds (px): a fork whose arms are no pieces yet, a star that the picture's edge cuts."""

BLOB_MARGIN = 3
"""Blobs nearer to the picture's edge than this are not looked at (double pixels)."""


def find_candidates(pieces: Segments, ridges: Ridges) -> NDArray[np.float64]:
    """Points (M, 2) in px that may be bursts."""
    if native.LIBRARY:
        return _find_compiled(pieces, ridges)
    points = np.concatenate([_blobs(ridges), _meeting_points(pieces, ridges.blurred.shape)])
    return np.concatenate([points, _lights(ridges, points)])


_BLOB_STEPS = np.asarray(BLOB_STEPS, np.int32)

RULES = records.CandidateRules(
    gap_px=GAP_PX,
    inner_px=INNER_PX,
    gap_lengths=GAP_LENGTHS,
    least_sin=LEAST_SIN,
    cell_px=CELL_PX,
    near=float(cv2.getGaussianKernel(3, CELL_BLUR)[0, 0]),
    least_votes=LEAST_VOTES,
    blob_noise=BLOB_NOISE,
    blob_fall=BLOB_FALL,
    light_noise=LIGHT_NOISE,
    light_apart_px=LIGHT_APART_PX,
    blob_step=native.place(_BLOB_STEPS),
    blob_steps=len(BLOB_STEPS),
    blob_margin=BLOB_MARGIN,
)
"""The same for the compiled form."""


def record(pieces: Segments, ridges: Ridges, contact_px: tuple[float, float] = (0.0, 0.0)) -> records.Traced:
    """A picture's ridges and pieces as the compiled forms take them; the arrays must be kept alive."""
    height, width = ridges.blurred.shape
    return records.Traced(
        native.place(ridges.excess),
        native.place(ridges.blurred),
        *(native.place(column) for column in (pieces.begin, pieces.end, pieces.axis, pieces.length)),
        *contact_px,
        ridges.threshold_noise,
        height,
        width,
        pieces.length.size,
    )


def _find_compiled(pieces: Segments, ridges: Ridges) -> NDArray[np.float64]:
    traced, room = record(pieces, ridges), 1024
    while True:
        at = np.empty((room, 2))
        found = native.LIBRARY.edgewatch_candidates(
            native.reference(traced), native.reference(RULES), native.place(at), room
        )
        if native.enough(found, room):
            return at[:found]
        room = 2 * found


def _meeting_points(pieces: Segments, shape: tuple[int, ...]) -> NDArray[np.float64]:
    count = pieces.length.size
    if count < 2:
        return np.zeros((0, 2))
    ends = np.concatenate([pieces.begin, pieces.end])
    inward = np.concatenate([pieces.axis, -pieces.axis])
    pairs = cKDTree(ends).query_pairs(GAP_PX, output_type="ndarray")
    i, j = pairs[:, 0], pairs[:, 1]
    ux, uy = inward[:, 0], inward[:, 1]
    cross = ux[i] * uy[j] - uy[i] * ux[j]
    good = np.flatnonzero((np.abs(cross) > LEAST_SIN) & (i % count != j % count))
    i, j, cross = i[good], j[good], cross[good]
    gx, gy = ends[j, 0] - ends[i, 0], ends[j, 1] - ends[i, 1]
    # ends[i] - s inward[i] = ends[j] - t inward[j], solved by Cramer's rule
    s = -(gx * uy[j] - gy * ux[j]) / cross
    t = -(gx * uy[i] - gy * ux[i]) / cross
    reach = np.minimum(GAP_PX, GAP_LENGTHS * pieces.length + 2.0)
    good = np.flatnonzero((s > -INNER_PX) & (s < reach[i % count]) & (t > -INNER_PX) & (t < reach[j % count]))
    i, s = i[good], s[good]
    x, y = ends[i, 0] - s * ux[i], ends[i, 1] - s * uy[i]
    inside = (x > 0.0) & (y > 0.0) & (x < shape[1] - 1) & (y < shape[0] - 1)
    return _densest(x[inside], y[inside], shape)


def _densest(x: NDArray[np.float64], y: NDArray[np.float64], shape: tuple[int, ...]) -> NDArray[np.float64]:
    """Places (M, 2) where votes at ``x``, ``y`` are dense: maxima of a blurred count, mean of the votes there."""
    high, wide = int(shape[0] / CELL_PX) + 1, int(shape[1] / CELL_PX) + 1
    cell = (y / CELL_PX).astype(np.int64) * wide + (x / CELL_PX).astype(np.int64)
    layers = [np.bincount(cell, weight, high * wide).reshape(high, wide) for weight in (None, x, y)]
    votes, sum_x, sum_y = (_cv.GaussianBlur(layer.astype(np.float32), (3, 3), CELL_BLUR) for layer in layers)
    top = _cv.dilate(votes, np.ones((3, 3), np.uint8))
    found = np.flatnonzero((votes >= top) & (votes > LEAST_VOTES))
    number = votes.ravel()[found]
    return np.stack([sum_x.ravel()[found] / number, sum_y.ravel()[found] / number], axis=1).astype(np.float64)


def _blobs(ridges: Ridges) -> NDArray[np.float64]:
    """Local maxima (M, 2) from which brightness falls off in every direction: no streak runs on from them.

    Looked for in a picture of half the size, which is soft enough and costs a quarter.
    """
    half = _halved(ridges.excess)
    width = half.shape[1]
    soft = _cv.GaussianBlur(half, (3, 3), 0)
    found = soft >= _cv.dilate(soft, np.ones((3, 3), np.uint8))
    found &= soft > max(2, int(BLOB_NOISE * ridges.threshold_noise))
    found[:BLOB_MARGIN] = found[-BLOB_MARGIN:] = False
    found[:, :BLOB_MARGIN] = found[:, -BLOB_MARGIN:] = False
    index = np.flatnonzero(found)
    flat = soft.ravel()
    most = (2.0 * (1.0 - BLOB_FALL)) * flat.take(index)
    keep = np.ones(index.size, np.bool_)
    for dx, dy in BLOB_STEPS:
        step = dy * width + dx
        keep &= flat.take(index + step).astype(np.int16) + flat.take(index - step) < most
    row, column = np.divmod(index[keep], width)
    return np.stack([2.0 * column + 0.5, 2.0 * row + 0.5], axis=1)


def _halved(excess: NDArray[np.uint8]) -> NDArray[np.uint8]:
    height, width = (size // 2 for size in excess.shape)
    return np.asarray(_cv.resize(excess[: 2 * height, : 2 * width], (width, height), interpolation=_cv.INTER_AREA))


_SPREAD = np.array([1.0, 4.0, 6.0, 4.0, 1.0], np.float32)


def _lights(ridges: Ridges, others: NDArray[np.float64]) -> NDArray[np.float64]:
    """Places (M, 2) where much light is gathered, away from points (N, 2) that are known already.

    Sums of whole numbers below 2^24, which single precision holds exactly.
    """
    high, wide = (size // LIGHT_CELL_PX for size in ridges.excess.shape)
    if not high or not wide:
        return np.zeros((0, 2))
    half, side = _halved(ridges.excess), LIGHT_CELL_PX // 2
    cells = half[: side * high, : side * wide].reshape(high, side, wide, side).sum(axis=(1, 3), dtype=np.float32)
    soft = _cv.sepFilter2D(cells, cv2.CV_32F, _SPREAD, _SPREAD, borderType=cv2.BORDER_CONSTANT)
    least = int(LIGHT_NOISE * ridges.threshold_noise * (side * float(_SPREAD.sum())) ** 2)
    row, column = np.nonzero((soft >= _cv.dilate(soft, np.ones((3, 3), np.uint8))) & (soft > least))
    middle = 0.5 * (LIGHT_CELL_PX - 1)
    at = np.stack([LIGHT_CELL_PX * column + middle, LIGHT_CELL_PX * row + middle], axis=1)
    return at[~(squared_gaps(at, others) < LIGHT_APART_PX**2).any(axis=1)]


def squared_gaps(one: NDArray[np.float64], other: NDArray[np.float64]) -> NDArray[np.float32]:
    """Squared distances (M, N) between points (M, 2) and (N, 2)."""
    a, b = one.astype(np.float32), other.astype(np.float32)
    x = a[:, None, 0] - b[None, :, 0]
    y = a[:, None, 1] - b[None, :, 1]
    x *= x
    y *= y
    x += y
    return np.asarray(x)
