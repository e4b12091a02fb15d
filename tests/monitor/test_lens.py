"""A soiled lens: streaks much dimmer or wider than teaching saw, by bands that know and fit."""

from __future__ import annotations

import dataclasses
import math

import pytest

from edgewatch.figures.tally import Tally
from edgewatch.figures.values import Figures
from edgewatch.judge.bands import Band
from edgewatch.monitor.lens import LEAST_STREAKS, LensLimits, LensWatch, lens_limits
from tests.figures.seen import OPTICS, seen

LIMITS = LensLimits(least_peak_dn=40.0, most_width_px=3.6)


def figures(peak_dn: float, width_px: float = 2.4, *, streaks: int = 500, seconds: float = 0.25) -> Figures:
    """A stretch of contact whose streaks look so."""
    tally = Tally(OPTICS)
    tally.add(seen([[60.0, 200.0, 100.0, 200.0]]), t_s=0.0)
    return dataclasses.replace(
        tally.figures(), end_s=seconds, streaks=streaks, streak_peak_dn=peak_dn, streak_width_px=width_px
    )


def band(grade: str = "A", **fields: float) -> Band:
    """A band that knows its streaks."""
    return Band(grade=grade, burst_rate_low_per_m=0.1, burst_rate_high_per_m=0.2, **fields)  # type: ignore[arg-type]


def test_limits_are_those_of_the_dimmest_and_the_widest_band_that_fits() -> None:
    """Half the height, one and a half times the width; another set-up of the camera, and bands that do not know, are
    left out.
    """
    bands = [
        band("A", streak_peak_dn=80.0, streak_width_px=2.2),
        band("B", streak_peak_dn=60.0, streak_peak_scatter=0.05, streak_width_px=2.6, streak_width_scatter=0.03),
        band("C"),
        band("D", streak_peak_dn=5.0, streak_width_px=9.0, mm_per_px=OPTICS.mm_per_px * 2.0),
    ]
    limits = lens_limits(bands, OPTICS)
    assert (limits.least_peak_dn, limits.most_width_px) == pytest.approx((30.0, 3.9))
    wild = lens_limits([band("A", streak_peak_dn=80.0, streak_peak_scatter=0.25)], OPTICS)
    assert wild.least_peak_dn == pytest.approx(80.0 / math.e)  # four deviations are more than a factor of two
    assert math.isnan(lens_limits([band()], OPTICS).least_peak_dn)


def test_a_second_of_dim_windows_is_needed_and_a_second_of_clear_ones_ends_it() -> None:
    """And just above the limit is not clear: no chatter."""
    watch = LensWatch()
    assert [watch.see_window(figures(30.0), LIMITS) for _ in range(4)] == [False, False, False, True]
    assert watch.detail == "streaks 30 DN high, at least 40 are taught"
    assert all(watch.see_window(figures(43.0), LIMITS) for _ in range(8))
    for _ in range(4):
        watch.see_window(figures(75.0), LIMITS)
    assert (watch.soiled, watch.detail) == (False, "")


def test_a_short_bar_is_judged_by_itself() -> None:
    """Half a second of contact is no second of windows, but the bar's own figures are known at its end."""
    watch = LensWatch()
    watch.see_window(figures(30.0), LIMITS)
    assert watch.see_bar(figures(30.0, seconds=0.5), LIMITS)
    assert not watch.see_bar(figures(70.0, seconds=0.5), LIMITS)
    assert watch.see_bar(figures(70.0, 4.0), LIMITS)
    assert watch.detail == "streaks 4.0 px wide, at most 3.6 are taught"


def test_few_streaks_and_unknown_looks_say_nothing() -> None:
    """Neither raised nor ended by a thin contact; NaN is never dim."""
    watch = LensWatch()
    assert not watch.see_bar(figures(10.0, streaks=LEAST_STREAKS - 1), LIMITS)
    assert not watch.see_bar(figures(math.nan, math.nan), LIMITS)
    assert not watch.see_bar(figures(10.0, 9.0), LensLimits())
    assert watch.see_bar(figures(10.0), LIMITS)
    watch.reset()
    assert not watch.soiled
