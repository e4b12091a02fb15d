"""Exact Poisson limits and the comparison of two rates against published tables and statsmodels."""

import math

import pytest
from statsmodels.stats.rates import confint_poisson
from statsmodels.stats.rates import test_poisson_2indep as compare_poisson

from edgewatch.figures.limits import poisson_limits, rate_ratio_limits

GARWOOD = [
    (0, 0.95, 0.0, 3.688879),
    (0, 0.90, 0.0, 2.995732),
    (1, 0.90, 0.051293, 4.743865),
    (1, 0.95, 0.025318, 5.571643),
    (2, 0.95, 0.242209, 7.224688),
    (5, 0.95, 1.623486, 11.668332),
    (5, 0.99, 1.077928, 14.149759),
    (10, 0.95, 4.795389, 18.390356),
    (20, 0.90, 13.254652, 29.062019),
    (20, 0.99, 10.353268, 34.667999),
    (50, 0.95, 37.110964, 65.918767),
    (100, 0.95, 81.363991, 121.626794),
    (1000, 0.99, 920.424046, 1084.372868),
]
"""Garwood, Biometrika 28 (1936) 437-442: two-sided limits of a Poisson mean (the page numbers are from memory; the
values are those of the chi-squared quantiles that define them, to six digits)."""


@pytest.mark.parametrize(("count", "confidence", "low", "high"), GARWOOD)
def test_limits_are_those_of_the_table(count: int, confidence: float, low: float, high: float) -> None:
    """Garwood's limits, six digits."""
    assert poisson_limits(count, 1.0, confidence=confidence) == pytest.approx((low, high), abs=1e-6)


def test_limits_agree_with_r_packages() -> None:
    """15 events in 400: the exact limits that statsmodels' own tests quote from R packages."""
    assert poisson_limits(15, 400.0) == pytest.approx((0.0209884653319583, 0.0618505471787146), rel=1e-12)


@pytest.mark.parametrize("count", [0, 1, 3, 17, 250, 4000])
def test_limits_agree_with_statsmodels(count: int) -> None:
    """An independent library, any exposure."""
    theirs = confint_poisson(count, 37.5, method="exact-c", alpha=0.05)
    assert poisson_limits(count, 37.5) == pytest.approx(theirs, rel=1e-10, abs=1e-15)


def test_zero_events_follow_the_rule_of_three() -> None:
    """No event: the one-sided 95 % limit is ln 20, which is the two-sided 90 % upper limit."""
    assert poisson_limits(0, 1.0, confidence=0.90)[1] == pytest.approx(math.log(20.0), rel=1e-12)


def test_ratio_of_two_rates_of_a_published_comparison() -> None:
    """Gu, Ng, Tang & Schucany, Biometrical J. 50 (2008): 60 in 51 477.5 against 30 in 54 308.7, 41 in 28 010 against
    15 in 19 017; exact conditional limits (Clopper-Pearson, recomputed with an independent library).
    """
    assert rate_ratio_limits(60, 51477.5, 30, 54308.7) == pytest.approx((1.339736, 3.388366), abs=1e-6)
    assert rate_ratio_limits(41, 28010.0, 15, 19017.0) == pytest.approx((1.005684, 3.609300), abs=1e-6)


@pytest.mark.parametrize(
    ("count", "exposure", "other", "other_exposure", "ratio", "p_value"),
    [(60, 51477.5, 30, 54308.7, 1.0, 0.000428), (41, 28010.0, 15, 19017.0, 1.5, 0.2913)],
)
def test_limits_turn_the_published_tests_round(
    count: int, exposure: float, other: int, other_exposure: float, ratio: float, p_value: float
) -> None:
    """The same paper's exact conditional p (one-sided): the one-sided limit at that level is the ratio tested.

    (The second p is 0.29145 by an independent program; the paper prints 0.2913.)
    """
    theirs = compare_poisson(
        count, exposure, other, other_exposure, value=ratio, method="exact-cond", alternative="larger"
    )
    assert theirs.pvalue == pytest.approx(p_value, abs=2e-4)
    low, _ = rate_ratio_limits(count, exposure, other, other_exposure, confidence=1.0 - 2.0 * float(theirs.pvalue))
    assert low == pytest.approx(ratio, rel=1e-9)


def test_clover_seeds() -> None:
    """Przyborowski & Wilenski, Biometrika 31 (1940): no weed seed in one sample, three in the other; the conditional
    test gives p = 0.25 two-sided, so one-sided 0.125, and the limit at that level is 1.
    """
    _, high = rate_ratio_limits(0, 100.0, 3, 100.0, confidence=0.75)
    assert high == pytest.approx(1.0, rel=1e-12)
