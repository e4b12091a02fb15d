"""Sight: pictures in, detections out, with the memory that this takes."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from edgewatch.sight.background import Background
from edgewatch.sight.bursts import arms_about, merge_points
from edgewatch.sight.detections import BurstFlag, Detections, Light, PictureFlag, StreakFlag
from edgewatch.sight.optics import Optics
from edgewatch.sight.ridges import BLUR_PX, MARGIN_PX, NOISE_GAIN, THRESHOLD_NOISE, find_ridges
from edgewatch.sight.segments import Segments, fit_segments, join_segments, link_ridges


@dataclass(frozen=True, slots=True, kw_only=True)
class SightTuning:
    """What may be tuned, in physical or noise units.

    ``least_snr``: a streak stands this many noise deviations above the background. ``least_length_px``: and is longer
    than this. ``arm_glow_s``: how long a burst's arms glow. ``arm_draw_s``: arms that drew for less are not seen.
    """

    least_snr: float = 4.7
    least_length_px: float = 6.0
    arm_glow_s: float = 0.002
    arm_draw_s: float = 0.00035


class Sight:
    """Looks at the pictures of one camera, in order. Deterministic; the first picture is already judged."""

    def __init__(self, optics: Optics, settings: SightTuning | None = None) -> None:
        """``optics`` gives picture size and timing."""
        self.optics = optics
        self.settings = settings or SightTuning()
        self._background = Background(period_s=optics.period_s)
        self._scratch = np.full(optics.height_px * optics.width_px, -1, np.int32)
        self.reset()

    @property
    def burst_exposure_gain(self) -> float:
        """Time a picture in which a burst would get listed, per exposure."""
        o, s = self.optics, self.settings
        listed_s = min(o.period_s, o.exposure_s + s.arm_glow_s - 2.0 * s.arm_draw_s)
        return max(0.1, listed_s / o.exposure_s)

    def reset(self) -> None:
        """Forget every picture seen."""
        self._background.reset()
        self._recent: list[NDArray[np.float64]] = []

    def look(self, picture: NDArray[np.uint8]) -> Detections:
        """Streaks and bursts of the next picture, uint8 (H, W). Raises ``ValueError`` on another shape or type."""
        o = self.optics
        if not isinstance(picture, np.ndarray) or picture.dtype != np.uint8:
            raise ValueError(f"picture: uint8 array needed, got {getattr(picture, 'dtype', type(picture).__name__)}")
        if picture.shape != (o.height_px, o.width_px):
            raise ValueError(f"picture: shape {(o.height_px, o.width_px)} needed, got {picture.shape}")
        excess = self._background.excess(picture)
        noise = self._background.noise_dn
        ridges = find_ridges(excess, noise)
        threshold = THRESHOLD_NOISE * NOISE_GAIN * noise
        label = link_ridges(ridges, self._scratch)
        pieces = fit_segments(ridges, label)
        ends = np.concatenate([pieces.begin, pieces.end])
        arms, odd = arms_about(ends, ridges.blurred, threshold)
        chosen = np.flatnonzero((arms >= 3) & (odd >= 2))
        chosen = chosen[merge_points(ends[chosen], (arms + odd)[chosen].astype(np.float64), 12.0)]
        bursts, burst_arms = ends[chosen], arms[chosen]
        fresh = self._fresh(bursts)
        lines, snr = self._streaks(pieces, bursts, ridges.blurred, threshold, noise)
        bursts, burst_arms = bursts[fresh], burst_arms[fresh]
        track_px = float(np.hypot(*(lines[:, 2:] - lines[:, :2]).T).sum())
        return Detections(
            streaks=lines.astype(np.float32),
            streak_snr=snr.astype(np.float32),
            streak_flags=self._cut(lines),
            bursts=bursts.astype(np.float32),
            burst_arms=burst_arms.astype(np.int16),
            burst_flags=np.full(fresh.size, BurstFlag.NONE, np.uint8),
            light=Light(
                background_dn=self._background.level_dn,
                noise_dn=noise,
                saturated_share=float((picture >= 254).mean()),
                streak_width_px=float("nan"),
                streak_peak_dn=float(np.median(snr) * noise) if snr.size else float("nan"),
                flags=PictureFlag.NONE,
            ),
            rate_bursts=int(fresh.size),
            rate_exposure_px=track_px * self.burst_exposure_gain,
        )

    def _fresh(self, bursts: NDArray[np.float64]) -> NDArray[np.int64]:
        old = np.concatenate(self._recent) if self._recent else np.zeros((0, 2))
        gap = np.hypot(*(bursts[:, None] - old[None]).transpose(2, 0, 1))
        fresh = np.flatnonzero(~(gap < 12.0).any(axis=1))
        pictures = int(np.ceil(2.0 * self.settings.arm_glow_s / self.optics.period_s))
        self._recent = [*self._recent, bursts][-max(1, pictures) :]
        return fresh

    def _streaks(
        self,
        pieces: Segments,
        bursts: NDArray[np.float64],
        blurred: NDArray[np.float32],
        threshold: float,
        noise: float,
    ) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        label = join_segments(pieces, blurred, threshold)
        count = int(label.max()) + 1 if label.size else 0
        weight = np.bincount(label, pieces.length, count)
        longest = np.lexsort((pieces.length, label))
        longest = longest[np.searchsorted(label[longest], np.arange(count), side="right") - 1]
        axis, origin = pieces.axis[longest], pieces.begin[longest]
        low, high = np.full(count, np.inf), np.full(count, -np.inf)
        for ends in (pieces.begin, pieces.end):
            at = ((ends - origin[label]) * axis[label]).sum(axis=1)
            np.minimum.at(low, label, at)
            np.maximum.at(high, label, at)
        height = np.bincount(label, pieces.height * pieces.length, count) / np.maximum(weight, 1e-9)
        bend = np.bincount(label, pieces.bend * pieces.length, count) / np.maximum(weight, 1e-9)
        variance = np.maximum(height / np.maximum(bend, 1e-9), BLUR_PX**2 + 0.3)
        snr = height * np.sqrt(variance / (variance - BLUR_PX**2)) / noise
        begin, end = origin + axis * low[:, None], origin + axis * high[:, None]
        ax, ay = self.optics.axis
        turned = axis[:, 0] * ax + axis[:, 1] * ay < 0.0
        begin[turned], end[turned] = end[turned], begin[turned].copy()
        starts_in_burst = (np.hypot(*(begin[:, None] - bursts[None]).transpose(2, 0, 1)) < 8.0).any(axis=1)
        keep = (snr >= self.settings.least_snr) & (high - low > self.settings.least_length_px) & ~starts_in_burst
        return np.concatenate([begin, end], axis=1)[keep], snr[keep]

    def _cut(self, lines: NDArray[np.float64]) -> NDArray[np.uint8]:
        o, near = self.optics, MARGIN_PX + 2.0
        flags = np.zeros(lines.shape[0], np.uint8)
        for flag, x, y in (
            (StreakFlag.CUT_BEGIN, lines[:, 0], lines[:, 1]),
            (StreakFlag.CUT_END, lines[:, 2], lines[:, 3]),
        ):
            edge = (x < near) | (y < near) | (x > o.width_px - 1 - near) | (y > o.height_px - 1 - near)
            flags[edge] |= np.uint8(flag)
        return flags
