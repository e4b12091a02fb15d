"""Waits between attempts."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from edgewatch.backoff import Backoff


def test_waits_double_up_to_the_cap_and_begin_anew() -> None:
    """Without chance each wait is half of 1, 2, 4, 5, 5 s; after a success it is short again."""
    backoff = Backoff(lambda: 0.0, first_s=1.0, most_s=5.0)
    assert [backoff.next_s() for _ in range(5)] == [0.5, 1.0, 2.0, 2.5, 2.5]
    backoff.reset()
    assert backoff.next_s() == 0.5


@given(chance=st.floats(0, 1, exclude_max=True), count=st.integers(1, 200))
def test_jitter_stays_between_half_and_whole(chance: float, count: int) -> None:
    """No wait is ever longer than the cap or shorter than half the first."""
    backoff = Backoff(lambda: chance, first_s=0.25, most_s=15.0)
    waits = [backoff.next_s() for _ in range(count)]
    assert all(0.125 <= wait <= 15.0 for wait in waits)
    assert waits == sorted(waits)


@pytest.mark.parametrize(("first", "most"), [(0.0, 1.0), (2.0, 1.0), (float("nan"), 1.0)])
def test_senseless_limits_are_refused(first: float, most: float) -> None:
    """A first wait of nothing or above the cap is refused."""
    with pytest.raises(ValueError, match="first_s"):
        Backoff(lambda: 0.0, first_s=first, most_s=most)
