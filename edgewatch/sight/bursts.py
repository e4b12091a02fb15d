"""Bursts: points from which three or more arms run out.

Arms are counted on rings about a candidate point: the brightness along each direction, then its maxima around the
circle. Two lines that cross give four arms in two straight pairs; what remains after straight pairs are taken
away must be two or more for a burst.
"""

from __future__ import annotations

import cv2
import numpy as np
from numpy.typing import NDArray

RING_RADII_PX = (4.0, 5.0, 6.0, 7.0)
"""Radii at which arms are counted (px)."""

DIRECTIONS = 48
"""Directions around the circle: 7.5 degrees, less than a pixel at the rings."""

STRAIGHT_STEPS = 2
"""Two arms within this many directions of opposite are one line passing through."""

VALLEY = 0.75
"""Between two arms brightness falls below this share of the weaker."""


def arms_about(
    points: NDArray[np.float64], blurred: NDArray[np.float32], threshold: float
) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Arms about each point (N, 2), and how many are left when straight pairs are taken away."""
    count = points.shape[0]
    if count == 0:
        return np.zeros(0, np.int64), np.zeros(0, np.int64)
    turn = np.arange(DIRECTIONS) * (2.0 * np.pi / DIRECTIONS)
    radii = np.asarray(RING_RADII_PX)
    dx = (radii[:, None] * np.cos(turn)).ravel().astype(np.float32)
    dy = (radii[:, None] * np.sin(turn)).ravel().astype(np.float32)
    mx = points[:, :1].astype(np.float32) + dx
    my = points[:, 1:].astype(np.float32) + dy
    ring = cv2.remap(blurred, mx, my, cv2.INTER_LINEAR, borderMode=cv2.BORDER_REPLICATE)
    ring = ring.reshape(count, radii.size, DIRECTIONS).min(axis=1)
    peak = (ring >= np.roll(ring, 1, 1)) & (ring > np.roll(ring, -1, 1)) & (ring > threshold)
    for step in (1, 2, 3):  # a maximum within 22 degrees
        peak &= (ring >= np.roll(ring, step, 1)) & (ring >= np.roll(ring, -step, 1))
    arms = peak.sum(axis=1)
    facing = np.zeros_like(peak)
    for step in range(-STRAIGHT_STEPS, STRAIGHT_STEPS + 1):
        facing |= np.roll(peak, DIRECTIONS // 2 + step, axis=1)
    odd = (peak & ~facing).sum(axis=1)
    return arms, odd


def merge_points(points: NDArray[np.float64], score: NDArray[np.float64], radius_px: float) -> NDArray[np.int64]:
    """Indices of points that no better point lies within ``radius_px`` of."""
    if points.shape[0] == 0:
        return np.zeros(0, np.int64)
    gap = np.hypot(*(points[:, None] - points[None]).transpose(2, 0, 1))
    order = np.lexsort((np.arange(score.size), -score))
    rank = np.empty_like(order)
    rank[order] = np.arange(order.size)
    beaten = ((gap < radius_px) & (rank[None, :] < rank[:, None])).any(axis=1)
    return np.flatnonzero(~beaten)
