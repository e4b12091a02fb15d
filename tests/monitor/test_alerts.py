"""Alerts follow one table of transitions."""

from hypothesis import given
from hypothesis import strategies as st

from edgewatch.monitor.alerts import MOST_OPEN, TRANSITIONS, Alert, AlertEvent, AlertList, AlertState


def words(alerts: list[Alert]) -> list[tuple[int, str]]:
    """Number and published word of each."""
    return [(alert.number, alert.shown) for alert in alerts]


def test_unlatched_alert_clears_when_its_reason_goes() -> None:
    """Raised, then cleared by itself; the same reason later makes a new alert."""
    alerts = AlertList()
    assert words(alerts.raise_("stalled", "no pictures", latched=False)) == [(1, "raised")]
    assert words(alerts.raise_("stalled", "no pictures", latched=False)) == []
    assert words(alerts.go("stalled")) == [(1, "cleared")]
    assert alerts.open == ()
    assert words(alerts.raise_("stalled", "no pictures", latched=False)) == [(2, "raised")]


def test_latched_alert_stays_until_acknowledged() -> None:
    """Its reason may go; the word stays raised until somebody has seen it, then it clears."""
    alerts = AlertList()
    alerts.raise_("nonconforming_bar", "bar 7", latched=True, bar=7)
    assert alerts.go("nonconforming_bar", bar=7) == []
    assert [alert.shown for alert in alerts.open] == ["raised"]
    cleared = alerts.acknowledge(1, "foreman")
    assert words(cleared) == [(1, "cleared")]
    assert cleared[0].who == "foreman"
    assert alerts.open == ()


def test_acknowledged_alert_clears_when_its_reason_goes() -> None:
    """Seen first, gone later; while it is there a second acknowledgement tells nothing new."""
    alerts = AlertList()
    alerts.raise_("relay_lost", "no answer", latched=True)
    assert words(alerts.acknowledge(None, "shift lead")) == [(1, "acknowledged")]
    assert alerts.acknowledge(1, "somebody else") == []
    assert words(alerts.go("relay_lost")) == [(1, "cleared")]


def test_unknown_numbers_and_reasons_change_nothing() -> None:
    """An acknowledgement of nothing is no error and no news."""
    alerts = AlertList()
    alerts.raise_("stalled", "no pictures", latched=False)
    before = alerts.open
    assert alerts.acknowledge(99, "foreman") == []
    assert alerts.go("frozen") == []
    assert alerts.open == before


def test_open_alerts_are_bounded() -> None:
    """Thousands of unseen bars do not fill the memory: the oldest lingering alert is cleared and said."""
    alerts = AlertList()
    told: list[Alert] = []
    for bar in range(MOST_OPEN + 5):
        told += alerts.raise_("nonconforming_bar", "bar", latched=True, bar=bar)
        alerts.go("nonconforming_bar", bar=bar)
    assert len(alerts.open) == MOST_OPEN
    assert [alert.bar for alert in told if alert.state is AlertState.CLEARED] == [0, 1, 2, 3, 4]


def test_alerts_survive_a_restart() -> None:
    """Open alerts and the next number are handed on; numbers are never used twice."""
    first = AlertList()
    first.raise_("nonconforming_bar", "bar 3", latched=True, bar=3)
    second = AlertList(next_number=first.next_number, open_alerts=first.open)
    assert words(second.raise_("stalled", "no pictures", latched=False)) == [(2, "raised")]
    assert words(second.acknowledge(1, "foreman")) == [(1, "acknowledged")]


@given(st.lists(st.sampled_from(list(AlertEvent)), max_size=12))
def test_an_event_the_table_does_not_list_changes_nothing(events: list[AlertEvent]) -> None:
    """Any sequence of events leaves the alert in a state reached by listed transitions only."""
    alert = Alert(number=1, reason="stalled", text="", latched=True)
    for event in events:
        after = alert.after(event)
        if (alert.state, event) in TRANSITIONS:
            assert after.state is TRANSITIONS[alert.state, event]
        else:
            assert after is alert
        alert = after
