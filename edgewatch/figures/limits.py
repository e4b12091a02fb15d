"""Exact limits of a Poisson rate, and of the ratio of two."""

from __future__ import annotations

import math

from scipy.special import betaincinv, gammaincinv

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


def rate_ratio_limits(
    count: int, exposure: float, other_count: int, other_exposure: float, *, confidence: float = CONFIDENCE
) -> tuple[float, float]:
    """Central limits of the ratio of two Poisson rates, the first over the other.

    Given their sum, the first count is binomial, and the ratio follows from Clopper and Pearson's limits of its share
    (Przyborowski & Wilenski, Biometrika 31, 1940). Without events nothing is known: (0, infinity).
    Raises ``ValueError`` on a negative count or an exposure that is not positive.
    """
    if min(count, other_count) < 0 or not (exposure > 0.0 and other_exposure > 0.0) or not 0.0 < confidence < 1.0:
        raise ValueError(f"counts {count!r}, {other_count!r}, exposures {exposure!r}, {other_exposure!r}: out of range")
    tail = (1.0 - confidence) / 2.0
    low = float(betaincinv(count, other_count + 1, tail)) if count else 0.0
    high = float(betaincinv(count + 1, other_count, 1.0 - tail)) if other_count else 1.0
    scale = other_exposure / exposure
    return low / (1.0 - low) * scale, high / (1.0 - high) * scale if high < 1.0 else math.inf
