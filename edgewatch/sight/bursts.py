"""Bursts: points from which three or more arms run out.

Candidates are points where the lines of pieces of ridge meet beyond their ends (a Hough transform for points: every
pair of pieces votes for its intersection), and points from which brightness falls off in every direction. About each
the picture is read on rings, turned so that the stream's own direction there comes first (a log-polar description,
Belongie et al. 2002). A small perceptron sifts out what is clearly none (a cascade, Viola & Jones 2001). On the rest a
net that shares its weights over directions (convolution, LeCun et al. 1989, here round the ring) tells a burst from a
crossing, an end beside another streak, or two streaks that overlap; it also says where the burst is, since what is
seen of a late one lies further down the stream, whether it went off before the exposure, and whether an earlier picture
showed it. For that it also sees the picture before at the same place, and is told what no ring shows: exposure, scale,
noise, crowd. Weights were learnt from both simulations with varied rendering by ``tests/bench/learn_bursts.py``.
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
from edgewatch.sight.optics import Optics
from edgewatch.sight.ridges import Ridges
from edgewatch.sight.segments import Segments
from edgewatch.sight.share import BurstShare

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

BEFORE_RINGS = (0, 2, 4, 6, 8, 10, 12)
"""Of these rings the net sees the picture before, too: arms that were there already, or the streak that led there."""

CROWD_PX = 40.0
"""Ends of pieces within this of a candidate are counted for the net, which cannot see so far (px)."""

CONTEXT_SIZE = 6
EXPOSURE_S, LEAST_CLOSED_S = 2.5e-3, 5e-5
"""Times enter as logarithms of their ratio to an ordinary exposure; a shutter closed for less is all but open (s)."""

_TURN = np.arange(RING_DIRECTIONS) * (2.0 * math.pi / RING_DIRECTIONS)
_OFFSETS = np.stack([np.outer(RING_RADII_PX, part) for part in (np.cos(_TURN), np.sin(_TURN))]).astype(np.float32)
_RINGS = _OFFSETS.reshape(2, -1)
_RINGS_BEFORE = np.ascontiguousarray(_OFFSETS[:, list(BEFORE_RINGS)]).reshape(2, -1)
"""Along the stream and across it, (2, rings x directions) px."""

UNMOVED_LEAST, UNMOVED_MOST = 0.9, 0.6
"""What looked the same in the picture before, by this cosine, is news by no more than the second probability: arms fly
on and fade, the net knows, and takes for news what does neither."""

LEVEL_NOISE = 3.0
"""Levels enter as log(1 + level / (this many noise deviations))."""

MERGE_PX = 13.0
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
    """Bursts of one picture, arrays of length M: ``at`` float64 (M, 2) px; float64 probabilities: ``sure`` of being
    one, ``late`` that it went off before the exposure, ``fresh`` that no earlier picture showed it.
    """

    at: NDArray[np.float64]
    sure: NDArray[np.float64]
    late: NDArray[np.float64]
    fresh: NDArray[np.float64]

    def take(self, rows: NDArray[np.bool_] | NDArray[np.int64]) -> Apexes:
        """Some of them."""
        return Apexes(at=self.at[rows], sure=self.sure[rows], late=self.late[rows], fresh=self.fresh[rows])


def find_apexes(
    pieces: Segments,
    ridges: Ridges,
    optics: Optics,
    least_sure: float,
    before: Ridges | None = None,
    share: BurstShare | None = None,
) -> Apexes:
    """Bursts of one picture: candidates of at least the probability ``least_sure``. ``before``: ridges of the picture
    before; ``share``: of bursts among the candidates of this stream, which learns from this picture.
    """
    contact_px, noise = optics.contact_px, ridges.threshold_noise
    at = find_candidates(pieces, ridges)
    at = at[np.hypot(at[:, 0] - contact_px[0], at[:, 1] - contact_px[1]) > CONTACT_PX]  # its own glow is no burst
    patches = read_patches(at, ridges.blurred, noise, contact_px)
    likely = np.flatnonzero(sift_patches(patches) >= SIFT_LEAST)
    at = at[likely]
    context = read_context(at, pieces, noise, optics, has_before=before is not None)
    patches, earlier = patches[likely], read_before(at, before, contact_px)
    answers = judge_patches(patches, earlier, context)
    unmoved = likeness(patches, earlier) > UNMOVED_LEAST
    if share is None:
        sure = _probability(answers[:, 0])
    else:
        sure = _probability(answers[:, 0] + share.shift)
        share.learn(sure, _probability((context @ learnt.SHARE + learnt.SHARE_BIAS)[:, 0]))
    likely = np.flatnonzero(sure >= least_sure)
    at, sure, answers, unmoved = at[likely], sure[likely], answers[likely], unmoved[likely]
    ahead, shift = _directions(at, contact_px), np.clip(answers[:, 1:3], -FARTHEST_PX, FARTHEST_PX)
    at = at + shift[:, :1] * ahead + shift[:, 1:] * np.stack([-ahead[:, 1], ahead[:, 0]], axis=1)
    keep = _likeliest(at, sure, pieces)
    fresh = _probability(answers[:, 4])
    fresh = np.where(unmoved, np.minimum(fresh, UNMOVED_MOST), fresh)
    return Apexes(at=at, sure=sure, late=_probability(answers[:, 3]), fresh=fresh).take(keep)


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
    near = np.count_nonzero(_squared_gaps(at, ends) < RING_RADII_PX[-1] ** 2, axis=1)
    order = np.arange(sure.size)
    better = (sure[None] > sure[:, None]) | ((sure[None] == sure[:, None]) & (order[None] < order[:, None]))
    better &= _squared_gaps(at, at) < MERGE_PX**2
    return np.asarray((near >= LEAST_ENDS) & ~better.any(axis=1))


def _squared_gaps(one: NDArray[np.float64], other: NDArray[np.float64]) -> NDArray[np.float32]:
    """Squared distances (M, N) between points (M, 2) and (N, 2)."""
    a, b = one.astype(np.float32), other.astype(np.float32)
    x = a[:, None, 0] - b[None, :, 0]
    y = a[:, None, 1] - b[None, :, 1]
    x *= x
    y *= y
    x += y
    return np.asarray(x)


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
    at: NDArray[np.float64],
    blurred: NDArray[np.float32],
    noise: float,
    contact_px: tuple[float, float],
    offsets: NDArray[np.float32] = _RINGS,
) -> NDArray[np.float32]:
    """Description of each point (M, 2), float32 (M, rings x directions); the first direction leads from the contact.
    ``offsets``: float32 (2, rings x directions), of what is read, along the stream and across it (px).
    """
    count = len(at)
    if not count:
        return np.zeros((0, offsets.shape[1]), np.float32)
    along, across = offsets
    place, ahead = at.astype(np.float32), _directions(at, contact_px).astype(np.float32)
    scale = 1.0 / (LEVEL_NOISE * noise)
    if native.LIBRARY:
        patches = np.empty((count, along.size), np.float32)
        done = native.LIBRARY.edgewatch_patches(
            native.place(blurred),
            *blurred.shape,
            count,
            native.place(place),
            native.place(ahead),
            along.size,
            native.place(along),
            native.place(across),
            native.single(RING_RADII_PX[-1] + 1.0),
            native.single(scale),
            native.place(patches),
        )
        native.enough(done, 0)
        return patches
    x = place[:, :1] + ahead[:, :1] * along - ahead[:, 1:] * across
    y = place[:, 1:] + ahead[:, 1:] * along + ahead[:, :1] * across
    level = _cv.remap(blurred, x, y, cv2.INTER_LINEAR, borderMode=cv2.BORDER_CONSTANT)
    return np.asarray(np.log1p(np.maximum(level, 0.0) * np.float32(scale)))


def read_before(at: NDArray[np.float64], before: Ridges | None, contact_px: tuple[float, float]) -> NDArray[np.float32]:
    """The same of the picture before, zeros without one: float32 (M, ``BEFORE_RINGS`` x directions)."""
    if before is None:
        return np.zeros((len(at), _RINGS_BEFORE.shape[1]), np.float32)
    return read_patches(at, before.blurred, before.threshold_noise, contact_px, _RINGS_BEFORE)


def likeness(patches: NDArray[np.float32], before: NDArray[np.float32]) -> NDArray[np.float64]:
    """Cosine (M,) between what is seen about points now, (M, F), and what was before, (M, G), on the rings of both."""
    now = patches.reshape(len(patches), len(RING_RADII_PX), RING_DIRECTIONS)[:, list(BEFORE_RINGS)]
    now = now.reshape(len(patches), len(BEFORE_RINGS) * RING_DIRECTIONS)
    norm = np.sqrt(np.einsum("ij,ij->i", now, now) * np.einsum("ij,ij->i", before, before))
    return np.asarray(np.einsum("ij,ij->i", now, before) / np.maximum(norm, 1e-6), dtype=np.float64)


def read_context(
    at: NDArray[np.float64], pieces: Segments, noise: float, optics: Optics, *, has_before: bool
) -> NDArray[np.float32]:
    """What the rings do not tell of points (M, 2), float32 (M, CONTEXT_SIZE): logarithms of exposure, of the time that
    the shutter was closed, of the scale, of the noise, of the ends of pieces within ``CROWD_PX``; whether there is a
    picture before.
    """
    crowd = _count_ends(at, pieces)
    context = np.empty((len(at), CONTEXT_SIZE), np.float32)
    context[:, 0] = math.log(optics.exposure_s / EXPOSURE_S)
    context[:, 1] = math.log(max(optics.period_s - optics.exposure_s, LEAST_CLOSED_S) / EXPOSURE_S)
    context[:, 2] = math.log(optics.mm_per_px)
    context[:, 3] = math.log(noise)
    context[:, 4] = np.log1p(crowd) - 2.0
    context[:, 5] = has_before
    return context


def _count_ends(at: NDArray[np.float64], pieces: Segments) -> NDArray[np.integer]:
    """How many ends of pieces lie within ``CROWD_PX`` of points (M, 2)."""
    if native.LIBRARY:
        at, crowd = np.ascontiguousarray(at), np.empty(len(at), np.int32)
        native.LIBRARY.edgewatch_crowd(
            len(at),
            native.place(at),
            pieces.length.size,
            native.place(pieces.begin),
            native.place(pieces.end),
            native.double(CROWD_PX),
            native.place(crowd),
        )
        return crowd
    ends = np.concatenate([pieces.begin, pieces.end])
    return np.asarray(np.count_nonzero(_squared_gaps(at, ends) < CROWD_PX**2, axis=1))


def sift_patches(patches: NDArray[np.float32]) -> NDArray[np.float64]:
    """Rough probability (M,) that each description (M, F) is a burst."""
    hidden = _layer(patches, learnt.SIFT, learnt.SIFT_BIAS)
    return _probability((hidden @ learnt.SIFTED + learnt.SIFTED_BIAS)[:, 0])


def judge_patches(
    patches: NDArray[np.float32], before: NDArray[np.float32], context: NDArray[np.float32]
) -> NDArray[np.float64]:
    """What the net says of descriptions (M, F) with those of the picture before (M, G) and context (M, C): (M, 5).

    Log odds that a burst is there; where, px along the stream and across it from the candidate; log odds that it went
    off before the exposure, and that no earlier picture showed it.
    """
    count = len(patches)
    if not count:
        return np.zeros((0, learnt.OUTPUT.shape[1]))
    first = _layer(windows(_channels(patches, before), FIRST_REACH, 1), learnt.FIRST, learnt.FIRST_BIAS)
    first = first.reshape(count, RING_DIRECTIONS, -1)
    second = _layer(windows(first, SECOND_REACH, SECOND_STEP), learnt.SECOND, learnt.SECOND_BIAS)
    joint = np.concatenate([second.reshape(count, -1), context], axis=1)
    hidden = _layer(joint, learnt.HIDDEN, learnt.HIDDEN_BIAS)
    return np.asarray(hidden @ learnt.OUTPUT + learnt.OUTPUT_BIAS, dtype=np.float64)


def _channels(patches: NDArray[np.float32], before: NDArray[np.float32]) -> NDArray[np.float32]:
    """Rings of a picture (M, F) and of the one before (M, G) as (M, directions, rings)."""
    count = len(patches)
    if native.LIBRARY:
        first, second = (part.shape[1] // RING_DIRECTIONS for part in (patches, before))
        patches, before = np.ascontiguousarray(patches), np.ascontiguousarray(before)
        out = np.empty((count, RING_DIRECTIONS, first + second), np.float32)
        places = [native.place(part) for part in (patches, before, out)]
        native.LIBRARY.edgewatch_channels(count, places[0], first, places[1], second, RING_DIRECTIONS, places[2])
        return out
    rings = np.concatenate([part.reshape(count, -1, RING_DIRECTIONS) for part in (patches, before)], axis=1)
    return np.asarray(rings.transpose(0, 2, 1))


def windows(values: NDArray[np.float32], reach: int, step: int) -> NDArray[np.float32]:
    """Each direction with its neighbours: (M, D, C) -> (M * D / step, (2 * reach + 1) * C), closed to a ring."""
    count, directions, channels = values.shape
    if native.LIBRARY:
        values, out = (
            np.ascontiguousarray(values),
            np.empty((count * directions // step, (2 * reach + 1) * channels), np.float32),
        )
        native.LIBRARY.edgewatch_windows(
            count, native.place(values), directions, channels, reach, step, native.place(out)
        )
        return out
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
