"""Bursts: exponential, independent of age, with the arms that were asked for."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import stats

from edgewatch.rehearsal import bursts, flight
from edgewatch.rehearsal.steel import find_steel


def straight(count: int, *, steps: int = 200, metres: float = 0.02) -> np.ndarray:
    """Exposure of flights that burst at any time: ``metres`` a step."""
    return np.tile(np.arange(steps + 1) * metres, (count, 1))


def test_distances_are_exponential() -> None:
    """Kolmogorov and Smirnov against the exponential of the hazard, conditional on bursting within the flight."""
    exposed = straight(20_000)
    at = bursts.strike(exposed, 0.9, np.random.default_rng(3))
    distance = at[np.isfinite(at)] * 0.02
    whole = exposed[0, -1]
    result = stats.kstest(distance, lambda x: -np.expm1(-0.9 * x) / -math.expm1(-0.9 * whole))
    assert result.pvalue > 0.01
    assert np.isfinite(at).mean() == pytest.approx(-math.expm1(-0.9 * whole), abs=0.01)


def test_the_young_and_the_old_burst_alike() -> None:
    """Hazard estimated on the first and on the later metre is the same: no ageing."""
    at = bursts.strike(straight(40_000), 0.9, np.random.default_rng(4)) * 0.02
    young = (at < 1.0).sum() / np.minimum(at, 1.0).sum()
    old = ((at >= 1.0) & (at < 2.0)).sum() / np.clip(np.minimum(at, 2.0) - 1.0, 0.0, None).sum()
    assert young == pytest.approx(0.9, rel=0.03)
    assert old == pytest.approx(0.9, rel=0.04)


def test_nothing_bursts_before_it_is_hot() -> None:
    """The first two steps carry no exposure: no burst falls there."""
    exposed = np.tile(np.concatenate([[0.0, 0.0, 0.0], np.arange(1, 50) * 0.1]), (5000, 1))
    at = bursts.strike(exposed, 3.0, np.random.default_rng(5))
    assert at.min() >= 2.0


def test_no_hazard_no_burst() -> None:
    """Hazard zero, and no flights at all."""
    assert np.isinf(bursts.strike(straight(100), 0.0, np.random.default_rng(1))).all()
    assert bursts.strike(np.zeros((0, 5)), 1.0, np.random.default_rng(1)).shape == (0,)


def test_exposure_counts_hot_way_only() -> None:
    """A flight that is hot in its middle third collects exactly the way of that third."""
    steps = 9
    path = np.arange(steps + 1)[None, :] * 0.1
    kelvin = np.full((1, steps + 1), bursts.BURST_LEAST_K - 1.0)
    kelvin[0, 4:7] = bursts.BURST_LEAST_K
    paths = flight.Paths(
        step_s=1e-3,
        position_m=np.zeros((1, steps + 1, 3)),
        velocity_m_s=np.zeros((1, steps + 1, 3)),
        temperature_k=kelvin,
        oxidised=np.zeros((1, steps + 1)),
        path_m=path,
    )
    assert bursts.exposed_m(paths)[0, -1] == pytest.approx(0.3)


def test_stars_have_the_arms_of_their_steel_and_forks_three() -> None:
    """Counts within the steel's limits; forks point forward, stars all round."""
    steel = find_steel("C80")
    velocity = np.tile([20.0, 0.0, 0.0], (400, 1))
    forks = np.arange(400) % 2 == 0
    arms = bursts.throw_arms(velocity, forks, steel, np.random.default_rng(6))
    number = np.bincount(arms.burst, minlength=400)
    assert (number[forks] == 3).all()
    assert number[~forks].min() == steel.arms_low
    assert number[~forks].max() == steel.arms_high
    forward = arms.velocity_m_s[:, 0]
    assert (forward[forks[arms.burst]] > 0.0).all()
    backward = np.bincount(arms.burst, weights=forward < 0.0, minlength=400)
    assert (backward[~forks] > 0).mean() > 0.5
    assert (arms.life_s > 0.0).all()
    assert (arms.stop_s > 0.0).all()


def test_no_bursts_no_arms() -> None:
    """An empty batch of bursts."""
    arms = bursts.throw_arms(np.zeros((0, 3)), np.zeros(0, bool), find_steel("C15"), np.random.default_rng(1))
    assert len(arms.burst) == 0
    assert arms.velocity_m_s.shape == (0, 3)
