"""Bursts: points from which three or more arms run out.

Candidates are points where the lines of pieces of ridge meet beyond their ends (a Hough transform for points: every
pair of pieces votes for its intersection), and points from which brightness falls off in every direction. About each
the picture is read on rings, turned so that the stream's own direction there comes first (a log-polar description,
Belongie et al. 2002). A small perceptron sifts out what is clearly none (a cascade, Viola & Jones 2001). On the rest a
net that shares its weights over directions (convolution, LeCun et al. 1989, here round the ring) tells a burst from a
crossing, an end beside another streak, or two streaks that overlap; it also says where the burst is, since what is
seen of a late one lies further down the stream, and whether it went off before the exposure. Weights were learnt from
both simulations with varied rendering by ``tests/bench/learn_bursts.py``.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import cv2
import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from edgewatch.sight import burst_weights as learnt
from edgewatch.sight import native
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

BLOB_NOISE = 8.0
"""A blob stands this many deviations of the blurred picture's noise above the background."""

RING_RADII_PX = (0.0, 1.5, 3.0, 4.5, 6.0, 7.5, 9.0, 11.0, 13.0, 15.5, 18.5, 22.0, 26.0)
RING_DIRECTIONS = 36
"""Rings and directions on which the picture about a candidate is read: at most 3.8 px apart."""

_TURN = np.arange(RING_DIRECTIONS) * (2.0 * math.pi / RING_DIRECTIONS)
_ALONG = np.outer(RING_RADII_PX, np.cos(_TURN)).ravel().astype(np.float32)
_ACROSS = np.outer(RING_RADII_PX, np.sin(_TURN)).ravel().astype(np.float32)

LEVEL_NOISE = 3.0
"""Levels enter as log(1 + level / (this many noise deviations))."""

MERGE_PX = 10.0
"""Of candidates nearer to each other than this only the likeliest is kept (px)."""

SIFT_LEAST = 0.01
"""Candidates to which the small perceptron gives less than this are not looked at again: see ``learn_bursts`` for the
share of bursts that this costs."""

FIRST_REACH, SECOND_REACH, SECOND_STEP = 2, 1, 2
"""The net's first layer sees this many directions to either side, the second so many of the first's, at every other."""

FARTHEST_PX = 14.0
"""The net moves a candidate by no more than this either way (px)."""

LEAST_ENDS = 2
"""Within the outermost ring at least so many ends of pieces lie, one line: a lone bright spot is a hot pixel."""

CONTACT_PX = 12.0
"""Nothing nearer to the contact point than this is a burst (px): sparks leave it in every direction."""

BLOB_MARGIN = 3
"""Blobs nearer to the picture's edge than this are not looked at (double pixels)."""


@dataclass(frozen=True, slots=True, eq=False)
class Apexes:
    """Bursts of one picture, arrays of length M: ``at`` float64 (M, 2) px; ``sure`` float64, probability of being one;
    ``late`` float64, probability that it went off before the exposure.
    """

    at: NDArray[np.float64]
    sure: NDArray[np.float64]
    late: NDArray[np.float64]

    def take(self, rows: NDArray[np.bool_] | NDArray[np.int64]) -> Apexes:
        """Some of them."""
        return Apexes(at=self.at[rows], sure=self.sure[rows], late=self.late[rows])


def find_apexes(pieces: Segments, ridges: Ridges, contact_px: tuple[float, float], least_sure: float) -> Apexes:
    """Bursts of one picture: candidates of at least the probability ``least_sure``."""
    at = find_candidates(pieces, ridges)
    at = at[np.hypot(at[:, 0] - contact_px[0], at[:, 1] - contact_px[1]) > CONTACT_PX]  # its own glow is no burst
    patches = read_patches(at, ridges.blurred, ridges.threshold_noise, contact_px)
    likely = np.flatnonzero(sift_patches(patches) >= SIFT_LEAST)
    at = at[likely]
    sure, shift, late = judge_patches(patches[likely])
    likely = np.flatnonzero(sure >= least_sure)
    at, sure, shift, late = at[likely], sure[likely], shift[likely], late[likely]
    ahead = _directions(at, contact_px)
    at = at + shift[:, :1] * ahead + shift[:, 1:] * np.stack([-ahead[:, 1], ahead[:, 0]], axis=1)
    keep = _likeliest(at, sure, pieces)
    return Apexes(at=at, sure=sure, late=late).take(keep)


def _likeliest(at: NDArray[np.float64], sure: NDArray[np.float64], pieces: Segments) -> NDArray[np.bool_]:
    """Which of bursts (M, 2), with their probabilities (M,), stay: of some near to each other one."""
    if native.LIBRARY:
        keep = np.empty(len(at), np.bool_)
        native.LIBRARY.edgewatch_merge(
            len(at),
            native.place(at),
            native.place(sure),
            pieces.length.size,
            native.place(pieces.begin),
            native.place(pieces.end),
            native.double(RING_RADII_PX[-1]),
            LEAST_ENDS,
            native.double(MERGE_PX),
            native.place(keep),
        )
        return keep
    ends = np.concatenate([pieces.begin, pieces.end])
    near = np.hypot(at[:, None, 0] - ends[None, :, 0], at[:, None, 1] - ends[None, :, 1]) < RING_RADII_PX[-1]
    gap = np.hypot(at[:, None, 0] - at[None, :, 0], at[:, None, 1] - at[None, :, 1])
    order = np.arange(sure.size)
    better = (sure[None] > sure[:, None]) | ((sure[None] == sure[:, None]) & (order[None] < order[:, None]))
    return np.asarray((near.sum(axis=1) >= LEAST_ENDS) & ~((gap < MERGE_PX) & better).any(axis=1))


def _directions(at: NDArray[np.float64], contact_px: tuple[float, float]) -> NDArray[np.float64]:
    """Unit vectors (M, 2) from the contact point to points (M, 2): the way the stream flies there."""
    away = at - np.asarray(contact_px)
    return np.asarray(away / np.maximum(np.hypot(away[:, 0], away[:, 1]), 1e-6)[:, None])


def find_candidates(pieces: Segments, ridges: Ridges) -> NDArray[np.float64]:
    """Points (M, 2) in px that may be bursts."""
    return np.concatenate([_blobs(ridges), _meeting_points(pieces, ridges.blurred.shape)])


def _meeting_points(pieces: Segments, shape: tuple[int, ...]) -> NDArray[np.float64]:
    count = pieces.length.size
    if count < 2:
        return np.zeros((0, 2))
    if native.LIBRARY:
        return _meeting_points_compiled(pieces, shape)
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


_NEAR = float(cv2.getGaussianKernel(3, CELL_BLUR)[0, 0])


def _meeting_points_compiled(pieces: Segments, shape: tuple[int, ...]) -> NDArray[np.float64]:
    room = 4 * pieces.length.size + 64
    while True:
        at = np.empty((room, 2))
        found = native.LIBRARY.edgewatch_meetings(
            pieces.length.size,
            *(native.place(column) for column in (pieces.begin, pieces.end, pieces.axis, pieces.length)),
            shape[0],
            shape[1],
            *map(native.double, (GAP_PX, INNER_PX, GAP_LENGTHS, LEAST_SIN, CELL_PX, _NEAR, LEAST_VOTES)),
            native.place(at),
            room,
        )
        if native.enough(found, room):
            return at[:found]
        room = found


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
    if native.LIBRARY:
        return _blobs_compiled(ridges)
    height, width = (size // 2 for size in ridges.excess.shape)
    half = _cv.resize(ridges.excess[: 2 * height, : 2 * width], (width, height), interpolation=_cv.INTER_AREA)
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


_BLOB_STEPS = np.asarray(BLOB_STEPS, np.int32)


def _blobs_compiled(ridges: Ridges) -> NDArray[np.float64]:
    excess = np.ascontiguousarray(ridges.excess)
    room = 1024
    while True:
        at = np.empty((room, 2))
        found = native.LIBRARY.edgewatch_blobs(
            native.place(excess),
            *excess.shape,
            min(255, max(2, int(BLOB_NOISE * ridges.threshold_noise))),
            BLOB_MARGIN,
            len(BLOB_STEPS),
            native.place(_BLOB_STEPS),
            native.double(BLOB_FALL),
            native.place(at),
            room,
        )
        if native.enough(found, room):
            return at[:found]
        room = found


def read_patches(
    at: NDArray[np.float64], blurred: NDArray[np.float32], noise: float, contact_px: tuple[float, float]
) -> NDArray[np.float32]:
    """Description of each point (M, 2), float32 (M, rings x directions); the first direction leads from the contact."""
    count = len(at)
    size = len(RING_RADII_PX) * RING_DIRECTIONS
    if not count:
        return np.zeros((0, size), np.float32)
    place, ahead = at.astype(np.float32), _directions(at, contact_px).astype(np.float32)
    scale = 1.0 / (LEVEL_NOISE * noise)
    if native.LIBRARY:
        patches = np.empty((count, size), np.float32)
        done = native.LIBRARY.edgewatch_patches(
            native.place(blurred),
            *blurred.shape,
            count,
            native.place(place),
            native.place(ahead),
            size,
            native.place(_ALONG),
            native.place(_ACROSS),
            native.single(RING_RADII_PX[-1] + 1.0),
            native.single(scale),
            native.place(patches),
        )
        native.enough(done, 0)
        return patches
    x = place[:, :1] + ahead[:, :1] * _ALONG - ahead[:, 1:] * _ACROSS
    y = place[:, 1:] + ahead[:, 1:] * _ALONG + ahead[:, :1] * _ACROSS
    level = _cv.remap(blurred, x, y, cv2.INTER_LINEAR, borderMode=cv2.BORDER_CONSTANT)
    return np.asarray(np.log1p(np.maximum(level, 0.0) * np.float32(scale)))


def sift_patches(patches: NDArray[np.float32]) -> NDArray[np.float64]:
    """Rough probability (M,) that each description (M, F) is a burst."""
    hidden = _layer(patches, learnt.SIFT, learnt.SIFT_BIAS)
    return _probability((hidden @ learnt.SIFTED + learnt.SIFTED_BIAS)[:, 0])


def judge_patches(
    patches: NDArray[np.float32],
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Of each description (M, F): probability (M,) that a burst is there; where, (M, 2) px along the stream and across
    it from the candidate; probability (M,) that it went off before the exposure.
    """
    count = len(patches)
    if not count:
        return np.zeros(0), np.zeros((0, 2)), np.zeros(0)
    rings = patches.reshape(count, len(RING_RADII_PX), RING_DIRECTIONS).transpose(0, 2, 1)
    first = _layer(windows(rings, FIRST_REACH, 1), learnt.FIRST, learnt.FIRST_BIAS)
    first = first.reshape(count, RING_DIRECTIONS, -1)
    second = _layer(windows(first, SECOND_REACH, SECOND_STEP), learnt.SECOND, learnt.SECOND_BIAS)
    hidden = _layer(second.reshape(count, -1), learnt.HIDDEN, learnt.HIDDEN_BIAS)
    out = (hidden @ learnt.OUTPUT + learnt.OUTPUT_BIAS).astype(np.float64)
    return _probability(out[:, 0]), np.clip(out[:, 1:3], -FARTHEST_PX, FARTHEST_PX), _probability(out[:, 3])


def windows(values: NDArray[np.float32], reach: int, step: int) -> NDArray[np.float32]:
    """Each direction with its neighbours: (M, D, C) -> (M * D / step, (2 * reach + 1) * C), closed to a ring."""
    count, directions, channels = values.shape
    closed = np.ascontiguousarray(np.concatenate([values[:, -reach:], values, values[:, :reach]], axis=1))
    size = (2 * reach + 1) * channels
    strides = (closed.strides[0], step * closed.strides[1], closed.strides[2])
    view = np.lib.stride_tricks.as_strided(closed, (count, directions // step, size), strides)
    return np.asarray(view.reshape(-1, size))


def _layer(inputs: NDArray[np.float32], weights: NDArray[np.float32], bias: NDArray[np.float32]) -> NDArray[np.float32]:
    if not len(inputs):
        return np.zeros((0, weights.shape[1]), np.float32)
    product: NDArray[np.float32] = inputs @ weights
    product += bias
    return np.asarray(np.maximum(product, 0.0, out=product))


def _probability(logit: NDArray[np.floating]) -> NDArray[np.float64]:
    return np.asarray(1.0 / (1.0 + np.exp(-np.clip(logit, -30.0, 30.0))), dtype=np.float64)
