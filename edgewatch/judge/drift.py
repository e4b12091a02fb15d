"""Charts on conforming bars: a slow common shift is wear or soiling, not a foreign bar.

Plain charts (EWMA, CUSUM) take standardised values and know nothing of bars; ``DriftWatch`` puts the standardised
residuals of conforming bars on them. Nothing adapts by itself: only master bars move the centre, within a limit.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from edgewatch.judge.bands import Band
from edgewatch.judge.likeness import LEAST_SCATTER, Evidence, reach_at_taught_speed

EWMA_WEIGHT = 0.05
EWMA_LIMIT = 3.6
"""Weight and limit (in the chart's own deviations). Wear takes hundreds of bars, so the average may be long; the limit
keeps false calls for maintenance rare (none in 4000 bars with ``bench_judge drift``), and with the
uncertainty of the centre still lies at about one bar-to-bar deviation, where the band's edge is at three or more."""
LARGEST_RECENTRE = 2.0
"""Master bars may move the centre by this many bar-to-bar deviations; beyond, the station must be taught again."""
LEAST_MASTERS = 3
"""Master bars that a check needs."""


class Ewma:
    """Exponentially weighted moving average of standardised values, two-sided, fixed limits.

    Roberts, Technometrics 1 (1959); in control the average's deviation tends to sqrt(w / (2 - w)). ``center_variance``
    is added to it: the taught centre is itself uncertain, which a long-lived chart would otherwise take for a shift.
    """

    def __init__(self, *, weight: float = EWMA_WEIGHT, limit: float = EWMA_LIMIT, center_variance: float = 0.0) -> None:
        if not (0.0 < weight <= 1.0 and limit > 0.0 and center_variance >= 0.0):
            raise ValueError(f"weight = {weight!r}, limit = {limit!r}, center_variance = {center_variance!r}")
        self.weight = weight
        self.limit = limit * math.sqrt(weight / (2.0 - weight) + center_variance)
        self.value = 0.0
        self.count = 0

    def update(self, value: float) -> bool:
        """Take a value; whether the average is beyond a limit. ``ValueError`` if the value is not finite."""
        if not math.isfinite(value):
            raise ValueError(f"value = {value!r}: a finite number is needed")
        self.value += self.weight * (value - self.value)
        self.count += 1
        return self.signal

    @property
    def signal(self) -> bool:
        """Whether the average is beyond a limit."""
        return abs(self.value) > self.limit

    def reset(self) -> None:
        """Start again at the centre."""
        self.value, self.count = 0.0, 0


class Cusum:
    """Two cumulative sums of standardised values, one each way; signals at ``limit`` or above.

    Page, Biometrika 41 (1954); head start of Lucas & Crosier, Technometrics 24 (1982). For counts give ``reference`` as
    Lucas, Technometrics 27 (1985), does; the signal is then at S >= limit.
    """

    def __init__(self, *, reference: float = 0.5, limit: float = 5.0, head_start: float = 0.0) -> None:
        if not (reference >= 0.0 and limit > 0.0 and 0.0 <= head_start < limit):
            raise ValueError(f"reference = {reference!r}, limit = {limit!r}, head_start = {head_start!r}")
        self.reference, self.limit, self.head_start = reference, limit, head_start
        self.reset()

    def reset(self) -> None:
        """Start again."""
        self.high = self.low = self.head_start
        self.count = 0

    def update(self, value: float) -> bool:
        """Take a value; whether either sum has reached the limit."""
        if not math.isfinite(value):
            raise ValueError(f"value = {value!r}: a finite number is needed")
        self.high = max(0.0, self.high + value - self.reference)
        self.low = max(0.0, self.low - value - self.reference)
        self.count += 1
        return self.signal

    @property
    def signal(self) -> bool:
        """Whether either sum has reached the limit."""
        return max(self.high, self.low) >= self.limit


@dataclass(frozen=True, slots=True, kw_only=True)
class DriftState:
    """Averages of standardised residuals (NaN for reach where none is judged), their limits, and causes if beyond."""

    bars: int
    rate: float
    rate_limit: float
    reach: float
    reach_limit: float
    causes: tuple[str, ...]


def residuals(band: Band, evidence: Evidence) -> tuple[float, float]:
    """Standardised deviations of a bar's hazard and reach from the taught centre; NaN where not known.

    The deviation holds scatter from bar to bar and the bar's own sampling noise.
    """
    rate = reach = math.nan
    expected = band.rate_center_per_m * evidence.exposure_m
    if expected > 0.0 and evidence.bursts >= 0:
        spread = math.sqrt(max(band.rate_scatter, LEAST_SCATTER) ** 2 + band.rate_dispersion / expected)
        rate = math.log((evidence.bursts + 0.5) / (expected + 0.5)) / spread
    if band.has_reach and band.reach_center_mm and evidence.reach_mm > 0.0:
        noise = (band.reach_noise_mm2_m or 0.0) / max(evidence.reach_track_m, 1e-9) / band.reach_center_mm**2
        spread = math.sqrt(max(band.reach_scatter or 0.0, LEAST_SCATTER) ** 2 + noise)
        reach = math.log(reach_at_taught_speed(band, evidence) / band.reach_center_mm) / spread
    return rate, reach


class DriftWatch:
    """Follows the conforming bars of one grade.

    ``update`` takes each conforming bar (nonconforming ones are not drift; inconclusive ones are not evidence).
    ``recentre`` takes master bars and moves the centre within ``LARGEST_RECENTRE``; nothing else adapts.
    """

    def __init__(self, band: Band, *, weight: float = EWMA_WEIGHT, limit: float = EWMA_LIMIT) -> None:
        self._band = band
        variance = 1.0 / max(band.bars_used, 5)
        self._rate = Ewma(weight=weight, limit=limit, center_variance=variance)
        self._reach = Ewma(weight=weight, limit=limit, center_variance=variance)
        self._offset = (0.0, 0.0)

    @property
    def offset(self) -> tuple[float, float]:
        """By how much master bars have moved the centres (in deviations): burst-rate, reach."""
        return self._offset

    @property
    def state(self) -> DriftState:
        """Where the charts stand."""
        causes = [name for name, chart in (("drift_rate", self._rate), ("drift_reach", self._reach)) if chart.signal]
        return DriftState(
            bars=self._rate.count,
            rate=self._rate.value,
            rate_limit=self._rate.limit,
            reach=self._reach.value if self._reach.count else math.nan,
            reach_limit=self._reach.limit,
            causes=tuple(causes),
        )

    def kept(self) -> dict[str, float | int]:
        """What must be kept over a restart, as JSON values."""
        return {
            "rate": self._rate.value,
            "rate_bars": self._rate.count,
            "reach": self._reach.value,
            "reach_bars": self._reach.count,
            "rate_offset": self._offset[0],
            "reach_offset": self._offset[1],
        }

    def restore(self, kept: Mapping[str, Any]) -> None:
        """Go on from what was kept; a value that is not a finite number counts as not kept."""

        def number(key: str) -> float:
            value = kept.get(key, 0.0)
            real = isinstance(value, (int, float)) and not isinstance(value, bool)
            return float(value) if real and math.isfinite(value) else 0.0

        self._rate.value, self._rate.count = number("rate"), max(0, int(number("rate_bars")))
        self._reach.value, self._reach.count = number("reach"), max(0, int(number("reach_bars")))
        self._offset = (number("rate_offset"), number("reach_offset"))

    def update(self, evidence: Evidence) -> DriftState:
        """Take one conforming bar."""
        rate, reach = residuals(self._band, evidence)
        if math.isfinite(rate):
            self._rate.update(rate - self._offset[0])
        if math.isfinite(reach):
            self._reach.update(reach - self._offset[1])
        return self.state

    def recentre(self, masters: Sequence[Evidence]) -> bool:
        """Confirm or reset with master bars of the grade. ``False`` and no change when they are too few or lie beyond
        the limit: then the station must be mended or taught again.
        """
        found = [residuals(self._band, one) for one in masters]
        rates = [rate for rate, _ in found if math.isfinite(rate)]
        reaches = [reach for _, reach in found if math.isfinite(reach)]
        if len(rates) < LEAST_MASTERS:
            return False
        rate = sum(rates) / len(rates)
        reach = sum(reaches) / len(reaches) if len(reaches) >= LEAST_MASTERS else self._offset[1]
        if max(abs(rate), abs(reach)) > LARGEST_RECENTRE:
            return False
        self._offset = (rate, reach)
        self._rate.reset()
        self._reach.reset()
        return True
