"""The wheel's speed, as told or as the sparks tell it, and what it means for reach."""

from __future__ import annotations

import math
import statistics
from collections import deque

from edgewatch.figures.values import Figures
from edgewatch.figures.wear import HIGH_M_S, LOW_M_S, reach_factor, speed_fits
from edgewatch.judge.bands import Band

WINDOWS = 20
"""Spark speed is the median over this many windows (5 s of contact): a wheel changes in weeks, a window scatters."""


class WheelWatch:
    """``told_m_s``: surface speed from the configuration or an order (NaN: not known). ``current``: an order told it,
    so somebody keeps it up to date; what the configuration says was true of a new wheel, and there sparks know better.
    """

    def __init__(self, told_m_s: float = math.nan, *, current: bool = False) -> None:
        self.tell(told_m_s, current=current)
        self._speeds: deque[float] = deque(maxlen=WINDOWS)

    def tell(self, told_m_s: float, *, current: bool) -> None:
        """Take another surface speed (m/s, NaN: not known)."""
        self.told_m_s, self._current = told_m_s, current

    def update(self, window: Figures) -> None:
        """Take a window's spark speed, if it has one."""
        if LOW_M_S <= window.spark_speed_m_s <= HIGH_M_S:
            self._speeds.append(window.spark_speed_m_s)

    @property
    def spark_m_s(self) -> float:
        """Spark speed near the wheel (m/s), NaN before any window told it."""
        return statistics.median(self._speeds) if self._speeds else math.nan

    def factor(self, band: Band) -> float:
        """What reach must be multiplied by to hold at the speed the band was taught at."""
        taught_spark = _in_range(band.spark_speed_m_s)
        by_sparks = not self._current and math.isfinite(taught_spark) and math.isfinite(self.spark_m_s)
        return reach_factor(
            taught_wheel_m_s=math.nan if by_sparks else _in_range(band.wheel_speed_m_s),
            taught_spark_m_s=taught_spark,
            wheel_m_s=_in_range(self.told_m_s),
            spark_m_s=self.spark_m_s,
        )

    @property
    def fits(self) -> bool:
        """Whether spark speed and surface speed fit each other; holds until enough windows are known."""
        return len(self._speeds) < WINDOWS // 2 or speed_fits(self.spark_m_s, _in_range(self.told_m_s))


def _in_range(speed_m_s: float) -> float:
    return speed_m_s if LOW_M_S <= speed_m_s <= HIGH_M_S else math.nan
