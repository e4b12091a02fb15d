"""The process stop follows its table."""

from hypothesis import given
from hypothesis import strategies as st

from edgewatch.monitor.stop import TRANSITIONS, StopEvent, StopState, after


def test_latched_stop_ends_by_release_only() -> None:
    """A condemned bar with latch: neither the next contact nor seeing again lets the line run."""
    state = after(StopState.RUN, StopEvent.CONDEMN_LATCHING)
    for event in StopEvent:
        if event is not StopEvent.RELEASE:
            assert after(state, event) is StopState.LATCHED
    assert after(state, StopEvent.RELEASE) is StopState.RUN


def test_unlatched_stop_ends_with_the_next_contact() -> None:
    """Without latch the stop is held until another bar touches the wheel."""
    assert after(StopState.RUN, StopEvent.CONDEMN) is StopState.HELD
    assert after(StopState.HELD, StopEvent.SEE) is StopState.HELD
    assert after(StopState.HELD, StopEvent.CONTACT) is StopState.RUN


def test_blind_stop_ends_when_the_station_sees_again() -> None:
    """Unless it latches."""
    assert after(after(StopState.RUN, StopEvent.BLIND), StopEvent.SEE) is StopState.RUN
    assert after(after(StopState.RUN, StopEvent.BLIND_LATCHING), StopEvent.SEE) is StopState.LATCHED


@given(st.lists(st.sampled_from(list(StopEvent)), max_size=20))
def test_only_listed_transitions_happen(events: list[StopEvent]) -> None:
    """Any sequence of events: a repeat of the last event never moves the state again."""
    state = StopState.RUN
    for event in events:
        then = after(state, event)
        assert then is TRANSITIONS.get((state, event), state)
        assert after(then, event) is then
        state = then
