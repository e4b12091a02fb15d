"""Wheel speed: an order is believed, else the sparks, else the configuration."""

import dataclasses
import math

import pytest

from edgewatch.figures.values import Figures
from edgewatch.figures.wear import REACH_EXPONENT
from edgewatch.monitor.wheel import WINDOWS, WheelWatch
from tests.monitor.streams import band

BAND = dataclasses.replace(band("C45", 0.5, 1.0), wheel_speed_m_s=28.0, spark_speed_m_s=25.0)


def window(spark_speed_m_s: float) -> Figures:
    """A window of which only the spark speed matters."""
    return Figures(
        begin_s=0.0,
        end_s=0.25,
        frames_seen=50,
        frames_skipped=0,
        streaks=100,
        bursts=5,
        track_m=5.0,
        exposure_m=5.0,
        burst_rate_per_m=1.0,
        burst_rate_low_per_m=0.5,
        burst_rate_high_per_m=2.0,
        reach_mm=400.0,
        reach_low_mm=380.0,
        reach_high_mm=420.0,
        cut_share=0.0,
        reach_truncated=False,
        streaks_per_frame=2.0,
        spark_speed_m_s=spark_speed_m_s,
    )


def watch(told_m_s: float, sparks_m_s: float, *, current: bool = False) -> WheelWatch:
    """A watch that has seen enough windows."""
    wheel = WheelWatch(told_m_s, current=current)
    for _ in range(WINDOWS):
        wheel.update(window(sparks_m_s))
    return wheel


def test_sparks_know_better_than_the_configuration() -> None:
    """The wheel has worn to four fifths and nobody changed the file."""
    assert watch(28.0, 20.0).factor(BAND) == pytest.approx(0.8**-REACH_EXPONENT)


def test_an_order_knows_better_than_sparks() -> None:
    """Somebody keeps it up to date."""
    assert watch(21.0, 20.0, current=True).factor(BAND) == pytest.approx((28.0 / 21.0) ** REACH_EXPONENT)


def test_the_configuration_serves_before_any_spark() -> None:
    """And nothing known means nothing compensated."""
    assert WheelWatch(21.0).factor(BAND) == pytest.approx((28.0 / 21.0) ** REACH_EXPONENT)
    assert WheelWatch().factor(BAND) == 1.0
    assert WheelWatch(28.0).factor(band("C45", 0.5, 1.0)) == 1.0


def test_windows_without_a_speed_say_nothing() -> None:
    """NaN, zero and absurd speeds are left out."""
    wheel = WheelWatch(28.0)
    for speed in (math.nan, 0.0, 1e6, -3.0):
        wheel.update(window(speed))
    assert math.isnan(wheel.spark_m_s)
    assert wheel.fits


def test_a_speed_that_cannot_be_is_named() -> None:
    """Half of the surface speed: scale, exposure or wheel is wrong; a little below it is right."""
    assert not watch(28.0, 14.0).fits
    assert watch(28.0, 26.0).fits
    assert watch(math.nan, 14.0).fits
