"""The hazard estimate (events over exposure, with limits) against censored life data with published answers."""

import pytest
from lifelines import ExponentialFitter, KaplanMeierFitter
from lifelines.datasets import load_leukemia

from edgewatch.figures.limits import poisson_limits, rate_ratio_limits

TREATED = [6, 6, 6, 6, 7, 9, 10, 10, 11, 13, 16, 17, 19, 20, 22, 23, 25, 32, 32, 34, 35]
TREATED_RELAPSED = [1, 1, 1, 0, 1, 0, 1, 0, 0, 1, 1, 0, 0, 0, 1, 1, 0, 0, 0, 0, 0]
PLACEBO = [1, 1, 2, 2, 3, 4, 4, 5, 5, 8, 8, 8, 8, 11, 11, 12, 12, 15, 17, 22, 23]
"""Freireich et al., Blood 21 (1963): weeks in remission under 6-MP (0: still in remission) and placebo."""


def test_data_are_those_that_lifelines_ships() -> None:
    """The lists above, against the copy in lifelines."""
    data = load_leukemia()
    treated = data[data["Rx"] == 0]
    assert sorted(zip(treated["t"], treated["status"], strict=True)) == sorted(
        zip(TREATED, TREATED_RELAPSED, strict=True)
    )
    assert sorted(data[data["Rx"] == 1]["t"]) == PLACEBO


def test_hazard_of_the_treated() -> None:
    """9 relapses in 359 weeks: 0.02507 a week (textbook value 9/359), as lifelines' exponential fit has it."""
    events, weeks = sum(TREATED_RELAPSED), float(sum(TREATED))
    assert (events, weeks) == (9, 359.0)
    fit = ExponentialFitter().fit(TREATED, TREATED_RELAPSED)
    assert events / weeks == pytest.approx(1.0 / fit.lambda_, rel=1e-4)


def test_limits_of_the_hazard() -> None:
    """Chi-squared limits of 9 events in 359 weeks, time-censored upper limit (2 d + 2 degrees of freedom)."""
    assert poisson_limits(9, 359.0) == pytest.approx((0.01146343, 0.04758998), abs=5e-9)


def test_treatment_changes_the_hazard() -> None:
    """Rate ratio 4.60 of placebo (21 in 182 weeks) over 6-MP; the published log-rank test rejects equality clearly,
    and so do the limits of the ratio.
    """
    ratio = (21 / 182.0) / (9 / 359.0)
    assert ratio == pytest.approx(4.602564, abs=1e-6)
    low, high = rate_ratio_limits(21, float(sum(PLACEBO)), 9, 359.0)
    assert 1.0 < low < ratio < high


def test_product_limit_and_hazard_tell_the_same_story() -> None:
    """Kaplan-Meier S(10) = 0.752941 (published); a constant hazard gives a value within its standard error 0.0963."""
    survival = KaplanMeierFitter().fit(TREATED, TREATED_RELAPSED).survival_function_at_times(10.0).iloc[0]
    assert survival == pytest.approx(0.752941, abs=1e-6)
    assert pytest.approx(survival, abs=0.0963) == (1.0 - 9 / 359.0) ** 10


def test_mean_time_between_failures_of_the_handbook() -> None:
    """NIST/SEMATECH 8.4.5.1: two failures in 800 h, 90 % interval of the mean time between them (127, 2251) h (values
    from memory, recomputed).
    """
    low, high = poisson_limits(2, 800.0, confidence=0.90)
    assert (1.0 / high, 1.0 / low) == pytest.approx((127.07, 2251.2), abs=0.05)
