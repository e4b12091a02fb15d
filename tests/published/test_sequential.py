"""Wald's boundaries and expected track, and the trial's own likelihood ratios against them."""

import math

import numpy as np
import pytest

from edgewatch.judge.bands import Band
from edgewatch.judge.counts import tilt
from edgewatch.judge.evidence import RateEvidence
from edgewatch.judge.sequential import boundaries, information_per_m, least_mean_track_m

POISSON_PLANS = [
    (1.0, 2.0, 0.05, 0.10, 3.247928, 4.169925, 1.442695, 6.151282),
    (1.0, 2.0, 0.10, 0.10, 3.169925, 3.169925, 1.442695, 4.550363),
    (4.0, 7.0, 0.05, 0.05, 5.261537, 5.261537, 5.360821, 2.888875),
    (2.0, 4.0, 0.01, 0.01, 6.629357, 6.629357, 2.885390, 5.828738),
]
"""Null, other, risks; accept and reject intercepts, slope, and expected exposure under the other, by the formulas of
Wald, Sequential Analysis (1947), evaluated by an independent program."""


@pytest.mark.parametrize(("null", "other", "alpha", "beta", "accept", "reject", "slope", "mean"), POISSON_PLANS)
def test_boundaries_and_expected_track(
    null: float, other: float, alpha: float, beta: float, accept: float, reject: float, slope: float, mean: float
) -> None:
    """Lines of the plan, and Wald's bound on the expected exposure."""
    found = boundaries(null, other, false_alarm=alpha, miss=beta)
    assert (found.accept, found.reject, found.slope_per_m) == pytest.approx((accept, reject, slope), abs=1e-6)
    assert least_mean_track_m(null, other, false_alarm=alpha, miss=beta) == pytest.approx(mean, abs=1e-6)


def test_reliability_plan_of_ratio_two() -> None:
    """MIL-HDBK-781 plan for a ratio of 2 and 10 % risks: acceptance without a failure at 4.40 times the lower mean
    life, then 5.79 and 7.18 (values from memory; the handbook rounds up).
    """
    found = boundaries(0.5, 1.0, false_alarm=0.10, miss=0.10)
    times = [(count + found.accept) / found.slope_per_m for count in range(3)]
    assert times == pytest.approx([4.40, 5.79, 7.18], abs=0.014)


def test_trial_holds_walds_lines() -> None:
    """One likelihood ratio of the trial crosses its threshold on Wald's rejection line, the miss risk taken as 0 and
    the weight of the ratio as part of the risk.
    """
    band = Band(grade="g", burst_rate_low_per_m=0.3, burst_rate_high_per_m=0.6)
    for part, ratio in zip(RateEvidence(band)._above, (1.5, 2.2, 4.5), strict=True):
        risk = 0.001 * math.exp(part.log_weight)
        line = boundaries(0.6, 0.6 * ratio, false_alarm=risk, miss=1e-12)
        for track in (1.0, 30.0, 400.0):
            bursts = line.slope_per_m * track + line.reject
            evidence = part.log_weight + part.gain * bursts - part.cost * track
            assert evidence == pytest.approx(math.log(1000.0), abs=1e-9)


def test_exact_error_of_a_poisson_plan() -> None:
    """Wald's inequality for a likelihood-ratio boundary: crossing probability under the null at most 1 / threshold.

    Exact recursion over windows of a fixed length (counts 0 to 80), not a simulation.
    """
    theta, kappa = tilt(2.0, 1.0)
    mean, threshold = 0.25, math.log(20.0)
    states = np.arange(400)
    mass = np.zeros(states.size)
    mass[0] = 1.0
    steps = np.exp(states[:60] * math.log(mean) - mean - np.array([math.lgamma(k + 1) for k in states[:60]]))
    crossed = 0.0
    for look in range(1, 401):
        mass = np.convolve(mass, steps)[: states.size]
        over = theta * states - kappa * mean * look >= threshold
        crossed += float(mass[over].sum())
        mass[over] = 0.0
    assert 0.015 < crossed <= 0.05  # 1/20 less the overshoot, which is at most a factor of two


def test_information_is_the_divergence_of_two_poisson_laws() -> None:
    """Kullback and Leibler: numerically, from the probabilities of counts on one metre."""
    counts = np.arange(80)
    factorial = np.array([math.lgamma(k + 1) for k in counts])
    one, other = (counts * math.log(rate) - rate - factorial for rate in (2.5, 0.9))
    assert information_per_m(2.5, 0.9) == pytest.approx(float(np.exp(one) @ (one - other)), rel=1e-12)
