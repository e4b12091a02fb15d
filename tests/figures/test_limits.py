"""Poisson limits: what they refuse, and what must always hold."""

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from edgewatch.figures.limits import poisson_limits, rate_ratio_limits


@given(st.integers(0, 100_000), st.floats(1e-6, 1e6), st.floats(0.5, 0.9999))
def test_limits_enclose_the_estimate_and_scale_with_exposure(count: int, exposure: float, confidence: float) -> None:
    """low <= estimate < high, and a rate per half the exposure is twice the rate."""
    low, high = poisson_limits(count, exposure, confidence=confidence)
    assert 0.0 <= low <= count / exposure < high
    assert poisson_limits(count, exposure / 2.0, confidence=confidence) == pytest.approx((2.0 * low, 2.0 * high))


@given(st.integers(0, 500), st.floats(0.1, 1e4), st.integers(0, 500), st.floats(0.1, 1e4))
def test_ratio_turned_round_is_its_inverse(count: int, exposure: float, other: int, other_exposure: float) -> None:
    """Swapping the two rates swaps and inverts the limits."""
    low, high = rate_ratio_limits(count, exposure, other, other_exposure)
    back_low, back_high = rate_ratio_limits(other, other_exposure, count, exposure)
    assert low <= high
    assert back_low == pytest.approx(0.0 if math.isinf(high) else 1.0 / high, rel=1e-9)
    assert back_high == pytest.approx(math.inf if low == 0.0 else 1.0 / low, rel=1e-9)


def test_nothing_is_known_without_exposure() -> None:
    """No track: NaN, not zero and not an error."""
    assert all(math.isnan(limit) for limit in poisson_limits(0, 0.0))
    assert rate_ratio_limits(0, 1.0, 0, 1.0) == (0.0, math.inf)


@pytest.mark.parametrize(
    ("count", "exposure", "confidence"), [(-1, 1.0, 0.95), (1, -1.0, 0.95), (1, math.nan, 0.95), (1, 1.0, 1.0)]
)
def test_refuses_nonsense(count: int, exposure: float, confidence: float) -> None:
    """Bad arguments are ValueError."""
    with pytest.raises(ValueError, match="out of range"):
        poisson_limits(count, exposure, confidence=confidence)
    with pytest.raises(ValueError, match="out of range"):
        rate_ratio_limits(count, exposure, 1, 1.0, confidence=confidence)
