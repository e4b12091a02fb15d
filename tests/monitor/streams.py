"""Simple moving pictures for the monitor's tests: straight streaks on a noisy ground, nothing that bursts."""

from __future__ import annotations

from collections.abc import Iterator

import cv2
import numpy as np
from numpy.typing import NDArray

from edgewatch.judge.bands import Band
from edgewatch.sight.frame import Frame
from edgewatch.wire.messages import Stamp

FPS = 100.0
WIDTH, HEIGHT = 320, 200


def quiet(rng: np.random.Generator) -> NDArray[np.uint8]:
    """A dark picture with noise."""
    return np.clip(rng.normal(10.0, 1.5, (HEIGHT, WIDTH)), 0, 255).astype(np.uint8)


def sparks(rng: np.random.Generator, number: int = 12) -> NDArray[np.uint8]:
    """Streaks that run along +x, each in a lane of its own so that none cross."""
    drawn = quiet(rng)
    lanes = rng.permutation(np.arange(10, HEIGHT - 10, 12))[:number]
    for y in lanes.tolist():
        x = int(rng.integers(70, 220))
        cv2.line(drawn, (x * 16, y * 16), ((x + 40) * 16, y * 16 + int(rng.integers(-40, 40))), 90, 2, cv2.LINE_AA, 4)
    return drawn


def line_of_bars(
    rng: np.random.Generator, *, bars: int, contact_s: float = 1.0, pause_s: float = 0.4, begin_s: float = 0.0
) -> Iterator[Frame]:
    """Frames of ``bars`` contacts with pauses around them."""
    plan = [False] * round(pause_s * FPS)
    for _ in range(bars):
        plan += [True] * round(contact_s * FPS) + [False] * round(pause_s * FPS)
    for index, touching in enumerate(plan):
        yield Frame(picture=sparks(rng) if touching else quiet(rng), index=index, t_s=begin_s + index / FPS, skipped=0)


def stamp(t_s: float, *, synced: bool = True) -> Stamp:
    """The moment ``t_s`` seconds into the test."""
    return Stamp(boot="test", monotonic_s=100.0 + t_s, utc_s=1.79e9 + t_s, synced=synced)


def band(grade: str, low_per_m: float, high_per_m: float) -> Band:
    """A band of burst-rate alone, written by hand."""
    return Band(
        grade=grade,
        burst_rate_low_per_m=low_per_m,
        burst_rate_high_per_m=high_per_m,
        rate_center_per_m=(low_per_m + high_per_m) / 2,
        rate_scatter=0.1,
    )
