"""Master bars held against a band: does the station still see the grade as it was taught?"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from edgewatch.figures.limits import rate_ratio_limits
from edgewatch.judge.bands import Band, ReferenceBar
from edgewatch.judge.drift import LEAST_MASTERS, residuals
from edgewatch.judge.likeness import Evidence

RISK_FACTOR = 3.0
"""The mean of the master bars may be off by this many of its own deviations: 0.3 % of checks cry wolf, as on any
control chart (Shewhart)."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Verification:
    """Mean deviations of the masters from the taught centres, in bar-to-bar deviations, and what is allowed; NaN where
    there is nothing to compare. ``ratio_low``, ``ratio_high``: 95 % limits of the masters' pooled burst-rate over
    that of the teaching, by counts alone.
    """

    bars: int
    holds: bool
    rate_shift: float
    rate_limit: float
    reach_shift: float
    reach_limit: float
    ratio_low: float
    ratio_high: float
    sentence: str


def bar_evidence(bar: ReferenceBar) -> Evidence:
    """A reference bar as evidence."""
    return Evidence(
        bursts=bar.bursts,
        exposure_m=bar.exposure_m,
        reach_mm=bar.reach_mm,
        reach_track_m=bar.reach_track_m,
        spark_m_s=bar.spark_speed_m_s,
    )


def verify(band: Band, masters: Sequence[ReferenceBar]) -> Verification:
    """Hold the mean of the masters against the taught centres; the limit counts their number and the teaching's."""
    found = [residuals(band, bar_evidence(bar)) for bar in masters]
    rates = [rate for rate, _ in found if math.isfinite(rate)]
    reaches = [reach for _, reach in found if math.isfinite(reach)]

    def mean_and_limit(values: Sequence[float]) -> tuple[float, float]:
        if not values:
            return math.nan, math.nan
        limit = RISK_FACTOR * math.sqrt(1.0 / len(values) + 1.0 / max(band.bars_used, 5))
        return sum(values) / len(values), limit

    rate, rate_limit = mean_and_limit(rates)
    reach, reach_limit = mean_and_limit(reaches)
    ratio = _pooled_ratio(band, masters)
    if len(rates) < LEAST_MASTERS:
        return Verification(
            bars=len(rates),
            holds=False,
            rate_shift=rate,
            rate_limit=rate_limit,
            reach_shift=reach,
            reach_limit=reach_limit,
            ratio_low=ratio[0],
            ratio_high=ratio[1],
            sentence=f"at least {LEAST_MASTERS} are needed to tell anything",
        )
    off = [
        f"{name} is off by {shift:+.1f} bar-to-bar deviations ({limit:.1f} are allowed)"
        for name, shift, limit in (("burst-rate", rate, rate_limit), ("reach", reach, reach_limit))
        if math.isfinite(shift) and abs(shift) > limit
    ]
    return Verification(
        bars=len(rates),
        holds=not off,
        rate_shift=rate,
        rate_limit=rate_limit,
        reach_shift=reach,
        reach_limit=reach_limit,
        ratio_low=ratio[0],
        ratio_high=ratio[1],
        sentence="; ".join(off) if off else "they agree with the band",
    )


def _pooled_ratio(band: Band, masters: Sequence[ReferenceBar]) -> tuple[float, float]:
    used = [bar for bar in band.bars if not bar.left_out]
    exposure, taught = sum(bar.exposure_m for bar in masters), sum(bar.exposure_m for bar in used)
    if not (exposure > 0.0 and taught > 0.0):
        return math.nan, math.nan
    return rate_ratio_limits(sum(bar.bursts for bar in masters), exposure, sum(bar.bursts for bar in used), taught)
