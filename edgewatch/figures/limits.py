"""Exact limits of a Poisson rate."""

from __future__ import annotations

import math

from scipy.special import gammaincinv

CONFIDENCE = 0.95
"""Confidence of every published interval, two-sided and central."""


def poisson_limits(count: int, exposure: float, *, confidence: float = CONFIDENCE) -> tuple[float, float]:
    """Central limits of a rate from ``count`` events in ``exposure``; per unit of exposure.

    Garwood, Biometrika 28 (1936): the limits are chi-squared quantiles with 2 x and 2 x + 2 degrees of freedom, halved,
    which are gamma quantiles. The lower limit is 0 without events. Without exposure nothing is known: (NaN, NaN).
    Raises ``ValueError`` on a negative count or exposure.
    """
    if count < 0 or not (exposure >= 0.0) or not 0.0 < confidence < 1.0:
        raise ValueError(f"count = {count!r}, exposure = {exposure!r}, confidence = {confidence!r}: out of range")
    if exposure == 0.0 or not math.isfinite(exposure):
        return math.nan, math.nan
    tail = (1.0 - confidence) / 2.0
    low = float(gammaincinv(count, tail)) if count else 0.0
    return low / exposure, float(gammaincinv(count + 1, 1.0 - tail)) / exposure
