"""Drift of conforming bars: charts, signals, recentring."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from edgewatch.judge.bands import Band
from edgewatch.judge.drift import LARGEST_RECENTRE, Cusum, DriftWatch, Ewma, residuals
from edgewatch.judge.likeness import Evidence

BAND = Band(
    grade="g",
    burst_rate_low_per_m=0.3,
    burst_rate_high_per_m=0.65,
    rate_center_per_m=0.45,
    rate_scatter=0.1,
    reach_low_mm=420.0,
    reach_high_mm=560.0,
    reach_center_mm=485.0,
    reach_scatter=0.04,
    reach_noise_mm2_m=20_000.0,
    bars_used=40,
)


def drawn(rng: np.random.Generator, *, rate_shift: float = 0.0, reach_shift: float = 0.0) -> Evidence:
    """A bar of the grade, its logarithms shifted."""
    rate = 0.45 * math.exp(rng.normal(rate_shift, 0.1))
    reach = 485.0 * math.exp(rng.normal(reach_shift, 0.04)) + rng.normal(0.0, math.sqrt(20_000.0 / 100.0))
    return Evidence(bursts=int(rng.poisson(rate * 200.0)), exposure_m=200.0, reach_mm=reach, reach_track_m=100.0)


@given(st.lists(st.floats(-50.0, 50.0), min_size=1, max_size=40), st.floats(0.01, 1.0))
def test_every_prefix_of_the_average_equals_the_batch(values: list, weight: float) -> None:
    """The recursion against the sum it stands for."""
    chart = Ewma(weight=weight)
    for count, value in enumerate(values, 1):
        chart.update(value)
        batch = sum(weight * (1.0 - weight) ** (count - 1 - k) * v for k, v in enumerate(values[:count]))
        assert chart.value == pytest.approx(batch, abs=1e-9)


@given(st.lists(st.floats(-5.0, 5.0), max_size=60))
def test_every_prefix_of_the_sums_equals_the_batch(values: list) -> None:
    """Page's sum is the largest sum over a tail of the values, less the reference each."""
    chart = Cusum(reference=0.5, limit=1e9)
    for count in range(1, len(values) + 1):
        chart.update(values[count - 1])
        tails = [sum(v - 0.5 for v in values[k:count]) for k in range(count + 1)]
        assert chart.high == pytest.approx(max(tails), abs=1e-9)


@pytest.mark.parametrize("chart", [Ewma(), Cusum()])
def test_charts_refuse_what_is_not_finite(chart: Ewma | Cusum) -> None:
    """A NaN would poison them for ever."""
    for value in (math.nan, math.inf):
        with pytest.raises(ValueError, match="finite"):
            chart.update(value)
    assert chart.count == 0


def test_charts_refuse_nonsense() -> None:
    """Bad arguments."""
    with pytest.raises(ValueError, match="weight"):
        Ewma(weight=0.0)
    with pytest.raises(ValueError, match="head_start"):
        Cusum(limit=4.0, head_start=4.0)


def test_residuals_are_standardised() -> None:
    """Mean 0, deviation 1, for bars of the grade."""
    rng = np.random.default_rng(1)
    found = np.array([residuals(BAND, drawn(rng)) for _ in range(4000)])
    assert found.mean(axis=0) == pytest.approx([0.0, 0.0], abs=0.07)
    assert found.std(axis=0) == pytest.approx([1.0, 1.0], abs=0.05)


def test_residuals_of_what_was_not_seen() -> None:
    """No track: not known. No burst at all: a finite, low residual."""
    assert all(math.isnan(part) for part in residuals(BAND, Evidence(bursts=0, exposure_m=0.0)))
    rate, reach = residuals(BAND, Evidence(bursts=0, exposure_m=50.0))
    assert rate < -5.0 and math.isfinite(rate)
    assert math.isnan(reach)


def test_steady_bars_raise_nothing() -> None:
    """A thousand bars of the grade."""
    rng = np.random.default_rng(2)
    watch = DriftWatch(BAND)
    assert not any(watch.update(drawn(rng)).causes for _ in range(1000))
    assert watch.state.bars == 1000


@pytest.mark.parametrize(
    ("shift", "cause"), [({"rate_shift": -0.15}, "drift_rate"), ({"reach_shift": -0.06}, "drift_reach")]
)
def test_a_common_shift_is_told_by_its_cause(shift: dict, cause: str) -> None:
    """One and a half deviations of all bars: the chart says which figure, while no bar by itself is foreign."""
    rng = np.random.default_rng(3)
    watch = DriftWatch(BAND)
    for number in range(200):  # noqa: B007 - how many it took is asserted below
        state = watch.update(drawn(rng, **shift))
        if state.causes:
            break
    assert state.causes == (cause,)
    assert number < 100


def test_master_bars_recentre_within_a_limit() -> None:
    """Masters with the same shift reset the charts; a shift beyond the limit is not adapted to."""
    rng = np.random.default_rng(4)
    watch = DriftWatch(BAND)
    while not watch.update(drawn(rng, reach_shift=-0.06)).causes:
        pass
    assert watch.recentre([drawn(rng, reach_shift=-0.06) for _ in range(6)])
    assert watch.state.causes == ()
    assert not any(watch.update(drawn(rng, reach_shift=-0.06)).causes for _ in range(100))
    before = watch.offset
    far = -0.04 * (LARGEST_RECENTRE + 2.0)
    assert not watch.recentre([drawn(rng, reach_shift=far) for _ in range(6)])
    assert not watch.recentre([drawn(rng)] * 2)
    assert watch.offset == before
