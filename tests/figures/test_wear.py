"""Reach over a wheel's life: the closed form against the flights, and verdicts that survive."""

from __future__ import annotations

import math

import numpy as np
import pytest

from edgewatch.figures import wear
from edgewatch.rehearsal.outline import outline
from edgewatch.rehearsal.steel import find_steel
from tests.bench.bench_wheel_wear import force_table, wear_table


@pytest.mark.parametrize("grade", ["C15", "C45", "C80", "42CrMo4"])
def test_the_power_law_is_that_of_the_flights(grade: str) -> None:
    """Streams flown on a full and a worn wheel: carried over by the law, reach agrees within 2.5 percent."""
    full = outline(find_steel(grade), sparks=8000, wheel_speed_m_s=30.0, rng=np.random.default_rng(1))
    worn = outline(find_steel(grade), sparks=8000, wheel_speed_m_s=20.0, rng=np.random.default_rng(2))
    assert worn.reach_mm < 0.85 * full.reach_mm
    assert wear.reach_at_speed(worn.reach_mm, 20.0, 30.0) == pytest.approx(full.reach_mm, rel=0.025)
    by_sparks = wear.reach_at_speed(worn.reach_mm, worn.spark_speed_m_s, full.spark_speed_m_s)
    assert by_sparks == pytest.approx(full.reach_mm, rel=0.03)


def test_there_and_back_is_where_it_was() -> None:
    """Carrying reach to another speed and back changes nothing; in one step or in two is the same."""
    there = wear.reach_at_speed(400.0, 30.0, 22.0)
    assert wear.reach_at_speed(there, 22.0, 30.0) == pytest.approx(400.0)
    assert wear.reach_at_speed(wear.reach_at_speed(400.0, 30.0, 26.0), 26.0, 22.0) == pytest.approx(there)
    assert math.isnan(wear.reach_at_speed(math.nan, 30.0, 20.0))


def test_the_factor_prefers_the_wheel_and_is_one_when_nothing_is_known() -> None:
    """Told speeds before measured ones; zero and NaN are unknown."""
    assert wear.reach_factor() == 1.0
    assert wear.reach_factor(taught_wheel_m_s=30.0, wheel_m_s=0.0) == 1.0
    assert wear.reach_factor(taught_wheel_m_s=30.0, wheel_m_s=math.nan, taught_spark_m_s=27.0) == 1.0
    by_wheel = wear.reach_factor(taught_wheel_m_s=30.0, wheel_m_s=20.0, taught_spark_m_s=27.0, spark_m_s=27.0)
    assert by_wheel == pytest.approx(1.5**wear.REACH_EXPONENT)
    by_sparks = wear.reach_factor(taught_spark_m_s=27.0, spark_m_s=18.0)
    assert by_sparks == pytest.approx(1.5**wear.REACH_EXPONENT)


def test_sparks_that_do_not_fit_the_wheel_are_noticed() -> None:
    """A little below the surface speed is right; faster than the wheel or half as fast is not; unknown says nothing."""
    assert wear.speed_fits(26.0, 28.0)
    assert not wear.speed_fits(35.0, 28.0)
    assert not wear.speed_fits(14.0, 28.0)
    assert wear.speed_fits(math.nan, 28.0)
    assert wear.speed_fits(26.0, 0.0)
    assert wear.speed_ratio(26.0, 28.0) == pytest.approx(26.0 / 28.0)
    assert math.isnan(wear.speed_ratio(26.0, math.nan))


@pytest.mark.parametrize("name", ["from_speed_m_s", "to_speed_m_s"])
@pytest.mark.parametrize("value", [0.0, -1.0, 1e4, math.nan, math.inf])
def test_impossible_speeds_are_refused_by_name(name: str, value: float) -> None:
    """Speeds that no grinding wheel has."""
    speeds = {"from_speed_m_s": 28.0, "to_speed_m_s": 28.0, name: value}
    with pytest.raises(ValueError, match=name):
        wear.reach_at_speed(400.0, **speeds)


@pytest.mark.parametrize("reach", [-1.0, math.inf])
def test_impossible_reach_is_refused(reach: float) -> None:
    """Negative and infinite."""
    with pytest.raises(ValueError, match="reach_mm"):
        wear.reach_at_speed(reach, 28.0, 20.0)


@pytest.mark.slow
def test_verdicts_survive_a_wheels_life() -> None:
    """A short line on a wheel that wears: without compensation good bars are condemned at its end, with it none is,
    and foreign bars are caught either way.
    """
    rows = {(row.way, row.part): row for row in wear_table(60, teach_bars=12, foreign_share=0.2, seed=3)}
    assert rows["no", "last third"].false_alarms > 0
    for way in ("wheel", "sparks"):
        whole = rows[way, "whole life"]
        assert whole.false_alarms == 0
        assert abs(rows[way, "last third"].reach_shift) < 0.04
        assert whole.caught >= 0.5 * whole.foreign
        assert whole.passed <= 1


@pytest.mark.slow
def test_force_does_not_condemn() -> None:
    """Half and twice the grinding force: reach moves by some percent, no good bar is condemned."""
    rows = force_table(12, teach_bars=12, seed=3)
    assert [row.false_alarms for row in rows] == [0] * len(rows)
    assert rows[0].reach_shift < rows[-1].reach_shift
    assert rows[-1].reach_shift - rows[0].reach_shift < 0.10
