"""How detections are held against truth; the same rules for every judge."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import linear_sum_assignment

ANGLE_DEG, OFFSET_PX, OVERLAP = 8.0, 4.0, 0.5
BURST_PX = 12.0
LEFT_OUT_PX = 60.0
LEAST_SNR, LEAST_LENGTH_PX = 5.0, 6.0


@dataclass
class Score:
    """Counts of right, missing and extra."""

    found: int = 0
    missed: int = 0
    extra: int = 0

    def add(self, found: int, truth: int, seen: int) -> None:
        """Add one picture."""
        self.found += found
        self.missed += truth - found
        self.extra += seen - found

    @property
    def precision(self) -> float:
        """Share of what was listed that is right."""
        return self.found / max(1, self.found + self.extra)

    @property
    def recall(self) -> float:
        """Share of truth that was found."""
        return self.found / max(1, self.found + self.missed)

    @property
    def f1(self) -> float:
        """Harmonic mean of the two; 1 when there was nothing to find and nothing was."""
        total = 2 * self.found + self.missed + self.extra
        return 2 * self.found / total if total else 1.0


def match_streaks(truth: NDArray[np.floating], seen: NDArray[np.floating]) -> list[tuple[int, int]]:
    """Pairs (truth, seen), each used once."""
    if not len(truth) or not len(seen):
        return []
    t, s = np.asarray(truth, float), np.asarray(seen, float)
    td, sd = t[:, 2:] - t[:, :2], s[:, 2:] - s[:, :2]
    tl, sl = np.hypot(*td.T), np.hypot(*sd.T)
    tu, su = td / np.maximum(tl, 1e-9)[:, None], sd / np.maximum(sl, 1e-9)[:, None]
    cosine = np.abs(tu @ su.T)
    a = ((s[None, :, :2] - t[:, None, :2]) * tu[:, None]).sum(-1)
    b = ((s[None, :, 2:] - t[:, None, :2]) * tu[:, None]).sum(-1)
    low, high = np.minimum(a, b), np.maximum(a, b)
    common = np.minimum(high, tl[:, None]) - np.maximum(low, 0)
    union = np.maximum(high, tl[:, None]) - np.minimum(low, 0)
    overlap = np.where(common > 0, common / np.maximum(union, 1e-9), 0)
    gap = 0.5 * (s[None, :, :2] + s[None, :, 2:]) - t[:, None, :2]
    offset = np.abs(gap[..., 0] * tu[:, None, 1] - gap[..., 1] * tu[:, None, 0])
    good = (cosine >= np.cos(np.radians(ANGLE_DEG))) & (offset <= OFFSET_PX) & (overlap > OVERLAP)
    return _assign(np.where(good, overlap, 0))


def match_bursts(truth: NDArray[np.floating], seen: NDArray[np.floating]) -> list[tuple[int, int]]:
    """Pairs (truth, seen), each used once."""
    if not len(truth) or not len(seen):
        return []
    gap = np.hypot(*(np.asarray(truth, float)[:, None] - np.asarray(seen, float)[None]).transpose(2, 0, 1))
    return _assign(np.where(gap <= BURST_PX, 1.0 / (1.0 + gap), 0))


def _assign(worth: NDArray[np.float64]) -> list[tuple[int, int]]:
    """Of all one-to-one pairs of positive worth as many as there can be, and of these the worthiest (Kuhn 1955)."""
    rows, columns = linear_sum_assignment(np.where(worth > 0, 1e3 + worth, 0.0), maximize=True)
    return [(int(r), int(c)) for r, c in zip(rows, columns, strict=True) if worth[r, c] > 0]


def far(points: NDArray[np.floating], contact: tuple[float, float]) -> NDArray[np.bool_]:
    """Points (N, 2) outside the region left out."""
    p = np.asarray(points, float).reshape(-1, 2)
    return np.asarray(np.hypot(p[:, 0] - contact[0], p[:, 1] - contact[1]) > LEFT_OUT_PX)


def middles(lines: NDArray[np.floating]) -> NDArray[np.float64]:
    """Middle points (N, 2) of lines (N, 4)."""
    lines = np.asarray(lines, float).reshape(-1, 4)
    return 0.5 * (lines[:, :2] + lines[:, 2:])
