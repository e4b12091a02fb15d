"""Evidence against "this bar lies in its band", that may be looked at after every window.

For one figure and one side the evidence is a mixture of likelihood ratios against the band's edge. Under every value
inside the band its expectation never rises above 1 (a non-negative supermartingale), so by Ville's inequality it ever
reaches 1 / false_alarm with probability at most false_alarm, however long the contact; so does the weighted mean of
both sides and both figures (Robbins, Ann. Math. Stat. 41, 1970; Howard, Ramdas, McAuliffe & Sekhon, Ann. Statist. 49,
2021). Everything is kept as sums over the bar, so the order of the windows does not matter.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from edgewatch.judge.bands import Band
from edgewatch.judge.counts import tilt

RATE_SHARE = 0.8
"""Share of the false-alarm budget for burst-rate where reach is judged too: burst-rate tells grades apart best."""
RATE_ABOVE = ((1.5, 0.2), (2.2, 0.4), (4.5, 0.4))
"""Hazard ratios to the band's upper edge that the test looks out for, with their weights.

A test built for ratio r has nearly the best growth from r / 1.7 to 2 r, so three cover all; each weight costs -log of
itself in evidence once.
"""
RATE_BELOW = ((0.7, 0.2), (0.45, 0.4), (0.15, 0.4))
"""The same below the lower edge."""
REACH_STEPS = ((0.05, 0.25), (0.12, 0.4), (0.3, 0.35))
"""Logarithmic distances of reach beyond an edge, with their weights: from just resolvable to another material."""


def log_sum(terms: list[float]) -> float:
    """Logarithm of a sum of exponentials."""
    largest = max(terms)
    if largest == -math.inf:
        return largest
    return largest + math.log(sum(math.exp(term - largest) for term in terms))


@dataclass(frozen=True, slots=True)
class _Part:
    """One likelihood ratio: log weight + gain * value - cost * size."""

    log_weight: float
    gain: float
    cost: float


class RateEvidence:
    """Log evidence that the hazard is above, and below, the band; each already carries its weight.

    Counts of dispersion d are tested with the exponential supermartingale of a negative binomial process
    (``counts.tilt``), which covers every family-size law with a lighter tail than the logarithmic one.
    """

    def __init__(self, band: Band) -> None:
        self.share = RATE_SHARE if band.has_reach else 1.0
        low, high = band.burst_rate_low_per_m, band.burst_rate_high_per_m
        self._above = [self._part(ratio, weight, high, band.rate_dispersion) for ratio, weight in RATE_ABOVE]
        self._below = [self._part(ratio, weight, low, band.rate_dispersion) for ratio, weight in RATE_BELOW]
        if low <= 0.0:
            self._below = []

    def _part(self, ratio: float, weight: float, edge: float, dispersion: float) -> _Part:
        gain, cost = tilt(ratio, dispersion)
        return _Part(math.log(0.5 * self.share * weight), gain, cost * edge)

    def sides(self, bursts: float, exposure_m: float) -> tuple[float, float]:
        """Log evidence (below, above) after ``bursts`` in ``exposure_m``."""
        below, above = (
            log_sum([p.log_weight + p.gain * bursts - p.cost * exposure_m for p in parts]) if parts else -math.inf
            for parts in (self._below, self._above)
        )
        return below, above

    def track_to_alert_m(self, rate_per_m: float, false_alarm: float) -> float:
        """About the mean track until this hazard is condemned (m; infinite inside the band): threshold over growth."""
        growths = (
            (-math.log(false_alarm) - part.log_weight, part.gain * rate_per_m - part.cost)
            for part in self._below + self._above
        )
        return min((nats / growth for nats, growth in growths if growth > 0.0), default=math.inf)


class ReachEvidence:
    """Log evidence that reach is above, and below, the band, from windows whose noise the teaching has measured.

    A window's reach is taken as normal with variance noise / track; S = sum of track * reach and T = sum of track are
    all that is kept.
    """

    def __init__(self, band: Band) -> None:
        low, high = band.reach_low_mm, band.reach_high_mm
        noise = band.reach_noise_mm2_m
        self.usable = bool(low is not None and high is not None and noise is not None and noise > 0.0)
        self._above: list[_Part] = []
        self._below: list[_Part] = []
        if not self.usable:
            return
        assert low is not None and high is not None and noise is not None
        for step, weight in REACH_STEPS:
            log_weight = math.log(0.5 * (1.0 - RATE_SHARE) * weight)
            for parts, edge, other in (
                (self._above, high, high * math.exp(step)),
                (self._below, low, low * math.exp(-step)),
            ):
                parts.append(_Part(log_weight, (other - edge) / noise, (other**2 - edge**2) / (2.0 * noise)))

    def sides(self, weighted_mm_m: float, track_m: float) -> tuple[float, float]:
        """Log evidence (below, above) from the sum of track times reach, and the sum of track."""
        below, above = (
            log_sum([p.log_weight + p.gain * weighted_mm_m - p.cost * track_m for p in parts]) if parts else -math.inf
            for parts in (self._below, self._above)
        )
        return below, above
