"""Detections made by hand, and a simple stream of them."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from edgewatch.sight.detections import Detections, Light, PictureFlag, StreakFlag
from edgewatch.sight.optics import Optics

OPTICS = Optics(
    width_px=640, height_px=400, mm_per_px=1.0, contact_px=(20.0, 200.0), direction_deg=0.0, exposure_ms=2.5, fps=200.0
)
LIGHT = Light(
    background_dn=5.0,
    noise_dn=1.0,
    saturated_share=0.0,
    streak_width_px=2.0,
    streak_peak_dn=50.0,
    flags=PictureFlag.NONE,
)


def seen(
    streaks: Sequence[Sequence[float]] | np.ndarray = (), *, bursts: int = 0, flags: Sequence[int] | None = None
) -> Detections:
    """Detections with these streaks (x0, y0, x1, y1 in px) and so many bursts somewhere."""
    lines = np.asarray(streaks, dtype=np.float32).reshape(-1, 4)
    count = len(lines)
    return Detections(
        streaks=lines,
        streak_snr=np.full(count, 20.0, np.float32),
        streak_flags=np.asarray([StreakFlag.NONE] * count if flags is None else flags, dtype=np.uint8),
        bursts=np.full((bursts, 2), 100.0, np.float32),
        burst_arms=np.full(bursts, 5, np.int16),
        burst_flags=np.zeros(bursts, np.uint8),
        light=LIGHT,
    )


def busy(
    rng: np.random.Generator, *, mean: float = 20.0, hazard_per_m: float = 0.5, reach_mm: float = 200.0
) -> Detections:
    """One frame of a stream whose track falls off so that 90 % lies within about ``reach_mm``."""
    count = rng.poisson(mean)
    near = rng.exponential(reach_mm / 2.6, count)
    angle = np.radians(rng.normal(0.0, 4.0, count))
    length = 50.0 * rng.normal(1.0, 0.05, count)
    x0, y0 = OPTICS.contact_px
    c, s = np.cos(angle), np.sin(angle)
    streaks = np.stack([x0 + near * c, y0 + near * s, x0 + (near + length) * c, y0 + (near + length) * s], axis=1)
    return seen(streaks, bursts=int(rng.poisson(hazard_per_m * length.sum() / 1000.0)))
