"""What a picture shows about a candidate: levels on rings, turned so that the stream's own direction there comes first.

A log-polar description (Belongie, Malik & Puzicha, IEEE Trans. PAMI 24, 2002, have counts where levels are here), of
this picture and of the one before, and what rings cannot show: exposure, scale, noise, crowd.
"""

from __future__ import annotations

import math
from typing import Any

import cv2
import numpy as np
from numpy.typing import NDArray

from edgewatch.sight import native
from edgewatch.sight.candidates import squared_gaps
from edgewatch.sight.native import records
from edgewatch.sight.optics import Optics
from edgewatch.sight.ridges import Ridges
from edgewatch.sight.segments import Segments

_cv: Any = cv2

RING_RADII_PX = (0.0, 1.5, 3.0, 4.5, 6.0, 7.5, 9.0, 11.0, 13.0, 15.5, 18.5, 22.0, 26.0)
RING_DIRECTIONS = 36
"""Rings and directions on which the picture about a candidate is read: at most 3.8 px apart."""

BEFORE_RINGS = (0, 2, 4, 6, 8, 10, 12)
"""Of these rings the net sees the picture before, too: arms that were there already, or the streak that led there."""

SIFT_RINGS, SIFT_STEP = (0, 2, 4, 6, 7, 8, 9, 10, 11, 12), 2
"""The sieve sees these rings, in every other direction: it tells as well as with all of them and costs a quarter."""

LEVEL_NOISE = 3.0
"""Levels enter as log(1 + level / (this many noise deviations))."""

CROWD_PX = 40.0
"""Ends of pieces within this of a candidate are counted for the net, which cannot see so far (px)."""

CONTEXT_SIZE = 6
NO_CROWD = -2.0
EXPOSURE_S, LEAST_CLOSED_S = 2.5e-3, 5e-5
"""Times enter as logarithms of their ratio to an ordinary exposure; a shutter closed for less is all but open (s)."""

_TURN = np.arange(RING_DIRECTIONS) * (2.0 * math.pi / RING_DIRECTIONS)
_OFFSETS = np.stack([np.outer(RING_RADII_PX, part) for part in (np.cos(_TURN), np.sin(_TURN))]).astype(np.float32)
RINGS = _OFFSETS.reshape(2, -1)
RINGS_BEFORE = np.ascontiguousarray(_OFFSETS[:, list(BEFORE_RINGS)]).reshape(2, -1)
RINGS_SIFT = np.ascontiguousarray(_OFFSETS[:, list(SIFT_RINGS), ::SIFT_STEP]).reshape(2, -1)
"""Places about a candidate, along the stream and across it: float32 (2, rings x directions) px."""


def record(offsets: NDArray[np.float32]) -> records.Places:
    """Places about a candidate, float32 (2, N), as the compiled forms take them; the array must be kept alive."""
    along, aside = offsets
    return records.Places(native.place(along), native.place(aside), RING_RADII_PX[-1] + 1.0, along.size)


def directions(at: NDArray[np.float64], contact_px: tuple[float, float]) -> NDArray[np.float64]:
    """Unit vectors (M, 2) from the contact point to points (M, 2): the way the stream flies there."""
    away = at - np.asarray(contact_px)
    return np.asarray(away / np.maximum(np.hypot(away[:, 0], away[:, 1]), 1e-6)[:, None])


def read_patches(
    at: NDArray[np.float64],
    blurred: NDArray[np.float32],
    noise: float,
    contact_px: tuple[float, float],
    offsets: NDArray[np.float32] = RINGS,
) -> NDArray[np.float32]:
    """Description of each point (M, 2), float32 (M, rings x directions); the first direction leads from the contact.
    ``offsets``: float32 (2, rings x directions), of what is read, along the stream and across it (px).
    """
    count = len(at)
    if not count:
        return np.zeros((0, offsets.shape[1]), np.float32)
    along, across = offsets
    place, ahead = at.astype(np.float32), directions(at, contact_px).astype(np.float32)
    scale = 1.0 / (LEVEL_NOISE * noise)
    if native.LIBRARY:
        patches, (height, width) = np.empty((count, along.size), np.float32), blurred.shape
        native.LIBRARY.edgewatch_patches(
            native.reference(records.Picture(native.place(blurred), height, width)),
            count,
            native.place(place),
            native.place(ahead),
            native.reference(record(offsets)),
            native.single(scale),
            native.place(patches),
        )
        return patches
    x = place[:, :1] + ahead[:, :1] * along - ahead[:, 1:] * across
    y = place[:, 1:] + ahead[:, 1:] * along + ahead[:, :1] * across
    level = _cv.remap(blurred, x, y, cv2.INTER_LINEAR, borderMode=cv2.BORDER_CONSTANT)
    return np.asarray(np.log1p(np.maximum(level, 0.0) * np.float32(scale)))


def read_rough(at: NDArray[np.float64], ridges: Ridges, contact_px: tuple[float, float]) -> NDArray[np.float32]:
    """What the sieve sees of points (M, 2): float32 (M, ``SIFT_RINGS`` x its directions)."""
    return read_patches(at, ridges.blurred, ridges.threshold_noise, contact_px, RINGS_SIFT)


def read_before(at: NDArray[np.float64], before: Ridges | None, contact_px: tuple[float, float]) -> NDArray[np.float32]:
    """The same of the picture before, zeros without one: float32 (M, ``BEFORE_RINGS`` x directions)."""
    if before is None:
        return np.zeros((len(at), RINGS_BEFORE.shape[1]), np.float32)
    return read_patches(at, before.blurred, before.threshold_noise, contact_px, RINGS_BEFORE)


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
    context = np.tile(read_camera(noise, optics, has_before=has_before), (len(at), 1))
    context[:, 4] += np.log1p(_count_ends(at, pieces))
    return context


def read_camera(noise: float, optics: Optics, *, has_before: bool) -> NDArray[np.float32]:
    """What of it is the same for all points of a picture, float32 (CONTEXT_SIZE,); its crowd is that of none."""
    closed_s = max(optics.period_s - optics.exposure_s, LEAST_CLOSED_S)
    return np.array(
        [
            math.log(optics.exposure_s / EXPOSURE_S),
            math.log(closed_s / EXPOSURE_S),
            math.log(optics.mm_per_px),
            math.log(noise),
            NO_CROWD,
            has_before,
        ],
        np.float32,
    )


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
    return np.asarray(np.count_nonzero(squared_gaps(at, ends) < CROWD_PX**2, axis=1))
