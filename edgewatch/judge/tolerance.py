"""Tolerance factors: how wide a band must be to hold a share of all bars, with a confidence, from a few of them."""

from __future__ import annotations

import functools
import math

import numpy as np
from numpy.typing import NDArray
from scipy.special import chdtri, ndtr, ndtri

_CHI_POINTS = 500
_NORMAL_POINTS = 100
"""Points that stand for the two pivotal quantities, denser where the factor is large; it is then good to 0.1 %."""
_LARGEST_OFFSET = 40.0


@functools.lru_cache(maxsize=8)
def _table(content: float) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Offsets, and k such that N(0, 1) has ``content`` within each offset -+ k."""
    grid = np.concatenate([np.linspace(0.0, 4.0, 400), np.linspace(4.05, _LARGEST_OFFSET, 50)])
    low, high = np.zeros_like(grid), grid + float(ndtri(0.5 + content / 2.0)) + 1.0
    for _ in range(60):
        middle = 0.5 * (low + high)
        enough = ndtr(grid + middle) - ndtr(grid - middle) >= content
        low, high = np.where(enough, low, middle), np.where(enough, middle, high)
    return grid, high


def _needed(offset: NDArray[np.float64], content: float) -> NDArray[np.float64]:
    """Half-width about a centre that is off by ``offset`` deviations."""
    grid, half = _table(content)
    return np.where(offset > _LARGEST_OFFSET, offset + float(ndtri(content)), np.interp(offset, grid, half))


def half_width(
    *, variance: float, noise: float, count: int, content: float, confidence: float, least_scatter: float = 0.0
) -> float:
    """Half-width about the mean of ``count`` values so that an interval holds ``content`` of the *true* values.

    ``variance``: sample variance of the values; ``noise``: the part of it that is measurement, known. The true values
    scatter by ``least_scatter`` or more. Generalised pivotal quantities (Weerahandi, JASA 88, 1993; Krishnamoorthy &
    Mathew, Statistical Tolerance Regions, 2009): with U chi-squared on n - 1 degrees of freedom and Z normal, the total
    variance is (n - 1) s^2 / U, the scatter of the true values what noise leaves of it, and the mean is off by Z times
    the total's standard error; the half-width holds the content in a share ``confidence`` of the pairs (U, Z). Without
    noise this is the exact two-sided factor of ISO 16269-6. Two-sided, centred. Raises ``ValueError`` for fewer than
    two values.
    """
    if count < 2 or not (variance >= 0.0 and noise >= 0.0):
        raise ValueError(f"count = {count!r}, variance = {variance!r}, noise = {noise!r}: out of range")
    even = (np.arange(_CHI_POINTS) + 0.5) / _CHI_POINTS
    chi_weight, tails = 2.0 * even, 1.0 - even**2  # chdtri takes the upper tail; small values widen the band
    total = (count - 1) * variance / chdtri(count - 1, tails)
    scatter = np.sqrt(np.maximum(total - noise, least_scatter**2))[:, None]
    even = (np.arange(_NORMAL_POINTS) + 0.5) / _NORMAL_POINTS
    normal_weight, normal = 2.0 * even, ndtri(1.0 - 0.5 * even**2)
    offset = normal[None, :] * np.sqrt(np.maximum(total, noise) / count)[:, None]
    safe = np.maximum(scatter, 1e-12)
    needed = np.where(scatter > 1e-12, safe * _needed(np.minimum(offset / safe, 1e9), content), offset)
    order = np.argsort(needed, axis=None)
    weight = (chi_weight[:, None] * normal_weight[None, :]).ravel()[order].cumsum()
    at = int(np.searchsorted(weight, confidence * weight[-1]))
    return float(needed.ravel()[order[min(at, order.size - 1)]])


def true_scatter(*, variance: float, noise: float, count: int) -> float:
    """Standard deviation of the true values: root of the mean of its generalised pivotal variance (see above).

    The plain difference of variances is 0 in half of the teachings whose noise is larger than the scatter; this never
    is, and with little noise it is the sample's deviation times sqrt((n - 1) / (n - 3)). At least four values.
    """
    if count < 4 or not (variance >= 0.0 and noise >= 0.0):
        raise ValueError(f"count = {count!r}, variance = {variance!r}, noise = {noise!r}: out of range")
    tails = (np.arange(_CHI_POINTS) + 0.5) / _CHI_POINTS
    total = (count - 1) * variance / chdtri(count - 1, tails)
    return math.sqrt(float(np.maximum(total - noise, 0.0).mean()))


def two_sided_factor(count: int, content: float, confidence: float) -> float:
    """Exact two-sided normal tolerance factor, mean and deviation unknown (ISO 16269-6)."""
    return half_width(variance=1.0, noise=0.0, count=count, content=content, confidence=confidence)


def least_sample(content: float, confidence: float, *, rank: int = 2) -> int:
    """Wilks, Ann. Math. Stat. 12 (1941): sample size for a distribution-free interval.

    ``rank`` 1 bounds one side by the extreme value; ``rank`` 2 is smallest to largest (or the second largest).
    """
    from scipy.special import bdtr

    count = rank
    while float(bdtr(rank - 1, count, 1.0 - content)) > 1.0 - confidence:
        count += 1
        if count > 10_000_000:
            raise ValueError(f"content = {content!r}: too near 1")
    return count


def esd_outliers(values: NDArray[np.float64], *, most: int, level: float) -> list[int]:
    """Places of outlying values, the farthest first: generalised extreme studentised deviate test.

    Rosner, Technometrics 25 (1983) 165-172, as in the NIST/SEMATECH handbook, 1.3.5.17.3. Up to ``most`` are looked
    for; ``level`` is the probability of naming any among normal values.
    """
    from scipy.special import stdtrit

    left = np.asarray(values, dtype=np.float64).copy()
    count = int(np.isfinite(left).sum())
    order: list[int] = []
    found = 0
    for step in range(1, most + 1):
        rest = count - step + 1
        if rest < 3:
            break
        spread = float(np.nanstd(left, ddof=1))
        if not spread > 0.0:
            break
        distance = np.abs(left - np.nanmean(left)) / spread
        place = int(np.nanargmax(distance))
        quantile = float(stdtrit(rest - 2, 1.0 - level / (2.0 * rest)))
        limit = (rest - 1) * quantile / math.sqrt((rest - 2 + quantile**2) * rest)
        order.append(place)
        if distance[place] > limit:
            found = step
        left[place] = math.nan
    return order[:found]
