"""Run lengths of the charts, simulated with the charts' own code, against published tables."""

import math

import numpy as np
import pytest

from edgewatch.judge.drift import Cusum, Ewma

RUNS = 3000
"""Runs a point: standard error below 2 % of a run length (run lengths scatter about like their mean)."""
CUSUM_TABLE = [(0.0, 168.0), (0.5, 26.6), (1.0, 8.38), (2.0, 3.34)]
"""Lucas & Crosier, Technometrics 24 (1982), Table 1: two-sided, k = 0.5, h = 4."""
CUSUM_FIR = [(0.0, 149.0), (1.0, 5.29), (2.0, 2.01)]
"""The same with head start 2."""
EWMA_TABLE = [(0.5, 3.071, 0.5, 88.8), (0.5, 3.071, 1.0, 17.5), (0.03, 2.437, 0.5, 29.3), (0.03, 2.437, 1.0, 12.6)]
"""Lucas & Saccucci, Technometrics 32 (1990), Table 3: weight, limit, shift, run length."""


def run_lengths(make, draw, runs: int) -> np.ndarray:
    """Lengths of ``runs`` runs of a fresh chart on drawn values."""
    lengths = np.zeros(runs)
    for run in range(runs):
        chart = make()
        length = 1
        while not chart.update(draw()):
            length += 1
        lengths[run] = length
    return lengths


def agrees(lengths: np.ndarray, published: float) -> bool:
    """Within four standard errors and the table's rounding."""
    error = float(lengths.std()) / math.sqrt(len(lengths))
    return abs(float(lengths.mean()) - published) < 4.0 * error + 0.006 * published


@pytest.mark.slow
@pytest.mark.parametrize(("shift", "published"), CUSUM_TABLE)
def test_cusum(shift: float, published: float) -> None:
    """Two-sided CUSUM."""
    values = iter(np.random.default_rng(3).normal(shift, 1.0, 1_500_000).tolist())
    runs = RUNS if shift else 1500
    assert agrees(run_lengths(lambda: Cusum(reference=0.5, limit=4.0), lambda: next(values), runs), published)


@pytest.mark.slow
@pytest.mark.parametrize(("shift", "published"), CUSUM_FIR)
def test_cusum_with_head_start(shift: float, published: float) -> None:
    """Fast initial response."""
    values = iter(np.random.default_rng(4).normal(shift, 1.0, 1_500_000).tolist())
    runs = RUNS if shift else 1500
    chart = lambda: Cusum(reference=0.5, limit=4.0, head_start=2.0)  # noqa: E731 - one line says it
    assert agrees(run_lengths(chart, lambda: next(values), runs), published)


@pytest.mark.slow
@pytest.mark.parametrize(("weight", "limit", "shift", "published"), EWMA_TABLE)
def test_ewma(weight: float, limit: float, shift: float, published: float) -> None:
    """Two-sided EWMA with fixed limits."""
    values = iter(np.random.default_rng(5).normal(shift, 1.0, 1_500_000).tolist())
    assert agrees(run_lengths(lambda: Ewma(weight=weight, limit=limit), lambda: next(values), RUNS), published)


@pytest.mark.slow
def test_poisson_cusum_signals_at_its_limit() -> None:
    """Lucas, Technometrics 27 (1985): k = 2, h = 6, mean 3.2: 5.49 (Lawson's worked example); S >= h signals, and with
    S > h instead the run length would be longer by a fifth.
    """
    values = iter(np.random.default_rng(6).poisson(3.2, 200_000).astype(float).tolist())
    lengths = run_lengths(lambda: Cusum(reference=2.0, limit=6.0), lambda: next(values), RUNS)
    # the lower sum of the two-sided chart: a count below 2 moves it by 2 at most, so it hardly ever signals first
    assert agrees(lengths, 5.49)


def test_limit_of_the_average() -> None:
    """The average's deviation tends to sqrt(w / (2 - w)) (Roberts 1959)."""
    assert Ewma(weight=0.2, limit=3.0).limit == pytest.approx(1.0, abs=1e-12)
