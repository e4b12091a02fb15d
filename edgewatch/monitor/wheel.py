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
    """``told_m_s``: surface speed from the configuration or an order (NaN: not known)."""

    def __init__(self, told_m_s: float = math.nan) -> None:
        self.told_m_s = told_m_s
        self._speeds: deque[float] = deque(maxlen=WINDOWS)

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
        return reach_factor(
            taught_wheel_m_s=_in_range(band.wheel_speed_m_s),
            taught_spark_m_s=_in_range(band.spark_speed_m_s),
            wheel_m_s=_in_range(self.told_m_s),
            spark_m_s=self.spark_m_s,
        )

    @property
    def fits(self) -> bool:
        """Whether spark speed and surface speed fit each other; holds until enough windows are known."""
        return len(self._speeds) < WINDOWS // 2 or speed_fits(self.spark_m_s, _in_range(self.told_m_s))


def _in_range(speed_m_s: float) -> float:
    return speed_m_s if LOW_M_S <= speed_m_s <= HIGH_M_S else math.nan
