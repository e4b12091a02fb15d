"""Bursts: points from which three or more arms run out.

Candidates are points where the lines of pieces of ridge meet beyond their ends (a Hough transform for points: every
pair of pieces votes for its intersection), and points from which brightness falls off in every direction. About each
the picture is read on rings, turned so that the stream's own direction there comes first (a log-polar description,
Belongie et al. 2002); a perceptron with one hidden layer (Rumelhart, Hinton & Williams 1986) tells a burst from a
crossing, an end beside another streak, or two streaks that overlap. Its weights were learnt from both simulations with
varied rendering by ``tests/bench/learn_bursts.py``.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import cv2
import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from edgewatch.sight.burst_weights import HIDDEN, HIDDEN_BIAS, OUTPUT, OUTPUT_BIAS
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

CELL_PX = 2.0
"""Side of the cells in which meeting points are counted (px)."""

LEAST_VOTES = 0.8
"""Votes, after blurring, that make a candidate: one clear meeting point."""

BLOB_BLUR_PX = 1.5
BLOB_ROUND = 0.15
"""A blob's weaker curvature is at least this share of its stronger one; along a streak it is nearly zero."""

BLOB_NOISE = 8.0
"""A blob stands this many deviations of the blurred picture's noise above the background."""

RING_RADII_PX = (0.0, 1.5, 3.0, 4.5, 6.0, 7.5, 9.0, 11.0, 13.0, 16.0)
RING_DIRECTIONS = 36
"""Rings and directions on which the picture about a candidate is read: at most 2.8 px apart."""

LEVEL_NOISE = 3.0
"""Levels enter as log(1 + level / (this many noise deviations))."""

MERGE_PX = 12.0
"""Of candidates nearer to each other than this only the likeliest is kept (px)."""

EDGE_PX = 6
"""Blobs nearer to the picture's edge than this are not looked at (px)."""


@dataclass(frozen=True, slots=True, eq=False)
class Apexes:
    """Bursts of one picture: ``at`` float64 (M, 2) px; ``sure`` float64 (M,), probability after the perceptron."""

    at: NDArray[np.float64]
    sure: NDArray[np.float64]


def find_apexes(
    pieces: Segments, blurred: NDArray[np.float32], noise: float, contact_px: tuple[float, float], least_sure: float
) -> Apexes:
    """Bursts of one picture. ``blurred``: float32 (H, W) from the ridge detector, ``noise``: its noise (DN)."""
    at = find_candidates(pieces, blurred, noise)
    sure = judge_patches(read_patches(at, blurred, noise, contact_px))
    likely = sure >= least_sure
    at, sure = at[likely], sure[likely]
    gap = np.hypot(at[:, None, 0] - at[None, :, 0], at[:, None, 1] - at[None, :, 1])
    order = np.arange(sure.size)
    better = (sure[None] > sure[:, None]) | ((sure[None] == sure[:, None]) & (order[None] < order[:, None]))
    keep = ~((gap < MERGE_PX) & better).any(axis=1)
    return Apexes(at=at[keep], sure=sure[keep])


def find_candidates(pieces: Segments, blurred: NDArray[np.float32], noise: float) -> NDArray[np.float64]:
    """Points (M, 2) in px that may be bursts."""
    return np.concatenate([_blobs(blurred, BLOB_NOISE * noise), _meeting_points(pieces, blurred.shape)])


def _meeting_points(pieces: Segments, shape: tuple[int, ...]) -> NDArray[np.float64]:
    count = pieces.length.size
    none = np.zeros((0, 2))
    if count < 2:
        return none
    ends = np.concatenate([pieces.begin, pieces.end])
    inward = np.concatenate([pieces.axis, -pieces.axis])
    pairs = cKDTree(ends).query_pairs(1.2 * GAP_PX, output_type="ndarray")
    i, j = pairs[:, 0], pairs[:, 1]
    cross = inward[i, 0] * inward[j, 1] - inward[i, 1] * inward[j, 0]
    good = (np.abs(cross) > LEAST_SIN) & (i % count != j % count)
    i, j, cross = i[good], j[good], cross[good]
    gap = ends[j] - ends[i]
    # ends[i] - s inward[i] = ends[j] - t inward[j], solved by Cramer's rule
    s = -(gap[:, 0] * inward[j, 1] - gap[:, 1] * inward[j, 0]) / cross
    t = -(gap[:, 0] * inward[i, 1] - gap[:, 1] * inward[i, 0]) / cross
    reach = np.minimum(GAP_PX, GAP_LENGTHS * pieces.length + 2.0)
    good = (s > -INNER_PX) & (s < reach[i % count]) & (t > -INNER_PX) & (t < reach[j % count])
    at = (ends[i] - s[:, None] * inward[i])[good]
    at = at[(at > 0.0).all(axis=1) & (at[:, 0] < shape[1] - 1) & (at[:, 1] < shape[0] - 1)]
    return _densest(at, shape) if at.size else none


def _densest(votes: NDArray[np.float64], shape: tuple[int, ...]) -> NDArray[np.float64]:
    """Places (M, 2) where votes (N, 2) are dense: maxima of a blurred count, then the mean of the votes about each."""
    high, wide = int(shape[0] / CELL_PX) + 1, int(shape[1] / CELL_PX) + 1
    cell = (votes[:, 1] / CELL_PX).astype(np.int64) * wide + (votes[:, 0] / CELL_PX).astype(np.int64)
    count = np.bincount(cell, minlength=high * wide).reshape(high, wide).astype(np.float32)
    spread = 1.2
    count = _cv.GaussianBlur(count, (7, 7), spread) * np.float32(2.0 * math.pi * spread**2)
    top = _cv.dilate(count, np.ones((5, 5), np.uint8))
    row, column = np.nonzero((count >= top) & (count > LEAST_VOTES))
    at = np.stack([(column + 0.5) * CELL_PX, (row + 0.5) * CELL_PX], axis=1)
    if not at.size:
        return at
    for _ in range(2):
        near, which = cKDTree(at).query(votes, distance_upper_bound=2.0 * CELL_PX)
        which = which[np.isfinite(near)]
        mine = votes[np.isfinite(near)]
        number = np.bincount(which, minlength=len(at))[:, None]
        total = np.stack([np.bincount(which, mine[:, k], len(at)) for k in (0, 1)], axis=1)
        at = np.where(number > 0, total / np.maximum(number, 1), at)
    return at


def _blobs(blurred: NDArray[np.float32], threshold: float) -> NDArray[np.float64]:
    """Local maxima (M, 2) from which brightness falls off in every direction."""
    soft = _cv.GaussianBlur(blurred, (9, 9), BLOB_BLUR_PX)
    top = _cv.dilate(soft, np.ones((5, 5), np.uint8))
    found = (soft >= top) & (soft > threshold)
    found[:EDGE_PX] = found[-EDGE_PX:] = False
    found[:, :EDGE_PX] = found[:, -EDGE_PX:] = False
    row, column = np.nonzero(found)
    centre = soft[row, column]
    bxx = soft[row, column - 1] + soft[row, column + 1] - 2.0 * centre
    byy = soft[row - 1, column] + soft[row + 1, column] - 2.0 * centre
    bxy = soft[row - 1, column - 1] + soft[row + 1, column + 1] - soft[row - 1, column + 1] - soft[row + 1, column - 1]
    half = np.hypot(0.5 * (bxx - byy), 0.25 * bxy)
    mean = 0.5 * (bxx + byy)
    keep = (mean + half) < BLOB_ROUND * (mean - half)
    return np.stack([column[keep], row[keep]], axis=1).astype(np.float64)


def read_patches(
    at: NDArray[np.float64], blurred: NDArray[np.float32], noise: float, contact_px: tuple[float, float]
) -> NDArray[np.float32]:
    """Description of each point (M, 2), float32 (M, rings x directions); the first direction leads from the contact."""
    count = len(at)
    size = len(RING_RADII_PX) * RING_DIRECTIONS
    if not count:
        return np.zeros((0, size), np.float32)
    away = at - np.asarray(contact_px)
    turn = np.arctan2(away[:, 1], away[:, 0])[:, None] + np.arange(RING_DIRECTIONS) * (2.0 * math.pi / RING_DIRECTIONS)
    radii = np.asarray(RING_RADII_PX)[None, :, None]
    x = at[:, 0, None, None] + radii * np.cos(turn)[:, None]
    y = at[:, 1, None, None] + radii * np.sin(turn)[:, None]
    level = _cv.remap(
        blurred,
        x.reshape(count, size).astype(np.float32),
        y.reshape(count, size).astype(np.float32),
        cv2.INTER_LINEAR,
        borderMode=cv2.BORDER_CONSTANT,
    )
    return np.asarray(np.log1p(np.maximum(level, 0.0) * np.float32(1.0 / (LEVEL_NOISE * noise))))


def judge_patches(patches: NDArray[np.float32]) -> NDArray[np.float64]:
    """Probability (M,) that each description (M, F) is a burst."""
    hidden = np.maximum(patches @ HIDDEN + HIDDEN_BIAS, 0.0)
    return np.asarray(1.0 / (1.0 + np.exp(-np.clip(hidden @ OUTPUT + OUTPUT_BIAS, -30.0, 30.0))), dtype=np.float64)
