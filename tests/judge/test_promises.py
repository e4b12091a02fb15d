"""The promises of the judging, simulated: quick versions of ``tests/bench/bench_judge.py``."""

import math

import numpy as np
import pytest

from tests.bench.bench_judge import (
    FALSE_ALARM,
    Population,
    agreement,
    alarms,
    band_coverage,
    clopper_pearson,
    cost_ms,
    drift_run,
    rate_coverage,
    run_line,
    the_band,
    tracks_to_alert,
)


def test_the_bench_computes_what_the_trial_computes() -> None:
    """The vectorised evidence of the simulations is the trial's own."""
    assert agreement() < 1e-9


@pytest.mark.slow
@pytest.mark.parametrize(
    ("dispersion", "law"), [(1.0, "Poisson"), (1.5, "negative binomial"), (1.5, "twins"), (3.0, "negative binomial")]
)
@pytest.mark.parametrize("place", ["upper edges", "lower edges"])
def test_false_alarms_at_the_edge(dispersion: float, law: str, place: str) -> None:
    """Both figures at an edge, 10 s, a look every window: no more false alarms than promised (99 % limits)."""
    band = the_band(dispersion=dispersion)
    upper = place == "upper edges"
    rate = band.burst_rate_high_per_m if upper else band.burst_rate_low_per_m
    reach = band.reach_high_mm if upper else band.reach_low_mm
    assert reach is not None
    hits = alarms(
        band, rate_per_m=rate, reach_mm=reach, contact_s=10.0, bars=4000, rng=np.random.default_rng(21), law=law
    )
    assert clopper_pearson(hits, 4000)[0] <= FALSE_ALARM


@pytest.mark.slow
def test_false_alarms_in_the_middle_are_far_rarer() -> None:
    """None in 4000 bars of 10 s; a hazard half again the edge's is found in nearly all (so the test can fail)."""
    band = the_band()
    rng = np.random.default_rng(22)
    assert alarms(band, rate_per_m=0.42, reach_mm=447.0, contact_s=10.0, bars=4000, rng=rng) == 0
    assert alarms(band, rate_per_m=0.9, reach_mm=447.0, contact_s=10.0, bars=400, rng=rng) > 360


@pytest.mark.slow
@pytest.mark.parametrize(("ratio", "most"), [(0.1, 1.5), (0.5, 2.0), (2.0, 2.0), (5.0, 1.5)])
@pytest.mark.parametrize("reach", [False, True])
def test_alerts_come_close_to_walds_bound(ratio: float, most: float, reach: bool) -> None:
    """Mean track to the alert over the least possible for these risks, with reach in the band or not."""
    assert 1.0 < tracks_to_alert(ratio, bars=2000, reach=reach) <= most


@pytest.mark.parametrize("mean", [0.5, 5.0, 100.0])
def test_exact_limits_cover(mean: float) -> None:
    """At least 95 %, within the simulation's error."""
    assert rate_coverage(mean, bars=20_000) >= 0.95 - 3.0 * math.sqrt(0.95 * 0.05 / 20_000)


@pytest.mark.slow
@pytest.mark.parametrize("count", [8, 20])
def test_bands_hold_what_they_promise(count: int) -> None:
    """95 % of the taught bands hold 99 % of the true values (quick: 200 teachings)."""
    for found in band_coverage(count, Population(windows=10, scatter=0.15), teachings=200):
        assert found >= 0.95 - 3.0 * math.sqrt(0.95 * 0.05 / 200)


@pytest.mark.slow
def test_a_line_of_four_grades() -> None:
    """5 % foreign bars: none called conforming, hardly a false alarm, good bars mostly conform."""
    found = run_line(1, bars=1000)
    assert found.foreign > 30
    assert found.foreign_conforming == 0
    assert found.foreign_nonconforming >= 0.8 * found.foreign
    assert clopper_pearson(found.good_nonconforming, found.good)[0] <= 0.01 + FALSE_ALARM  # content 99 %
    assert found.good_inconclusive < 0.05 * found.good


@pytest.mark.slow
def test_drift_is_told_long_before_bars_are_condemned() -> None:
    """Reach that shrinks by 0.1 % a bar: the chart signals in less than half the bars that condemnation takes."""
    signalled, condemned = drift_run(-0.001, seed=5, most=1000)
    assert 0 < signalled < condemned / 2


def test_judging_is_cheap() -> None:
    """Not a benchmark: a look costs microseconds, so ten times the promised 0.2 ms would be a defect."""
    assert cost_ms(2000)[0] < 2.0
