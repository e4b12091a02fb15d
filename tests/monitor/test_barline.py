"""What the line reports against what is seen."""

from __future__ import annotations

from hypothesis import given
from hypothesis import strategies as st

from edgewatch.monitor.barline import BarLine
from edgewatch.monitor.effects import Effect
from tests.monitor.streams import stamp
from tests.monitor.test_monitor import monitor, records, run


def test_bar_without_sparks_is_missed_until_one_is_seen() -> None:
    """Reported for longer than allowed: missed, and it stays so when the bar goes, until a contact is seen."""
    line = BarLine(late_s=1.0)
    assert not line.missed(False, 0.0)
    line.report(True, 10.0)
    assert not line.missed(False, 11.0)
    assert line.missed(False, 11.1)
    line.report(False, 12.0)
    assert line.missed(False, 60.0)
    line.report(True, 70.0)
    assert not line.missed(True, 70.3)
    assert not line.missed(False, 90.0)  # this report is answered, however long the bar stays


def test_short_reports_and_sparks_without_report_are_in_order() -> None:
    """A report shorter than allowed says nothing, and sparks need no report (hand grinding, a late switch)."""
    line = BarLine(late_s=1.0)
    for begin_s in range(0, 50, 2):
        line.report(True, float(begin_s))
        assert not line.missed(False, begin_s + 0.9)
        line.report(False, begin_s + 0.95)
    assert not line.missed(True, 100.0) and not line.missed(False, 200.0)


def test_repeated_reports_do_not_begin_the_wait_anew() -> None:
    """The same level told again changes nothing."""
    line = BarLine(late_s=1.0)
    line.report(True, 0.0)
    line.report(True, 0.9)
    assert line.missed(False, 1.05)


@given(steps=st.lists(st.tuples(st.booleans(), st.booleans(), st.floats(0.0, 3.0)), max_size=30))
def test_missed_only_after_a_long_report_without_sparks(steps: list[tuple[bool, bool, float]]) -> None:
    """Whatever the sequence: it begins only while a report lasts longer than allowed and no contact was seen in it."""
    line = BarLine(late_s=1.0)
    now_s, since_s, answered, before = 0.0, None, False, False
    for closed, in_contact, wait_s in steps:
        now_s += wait_s
        line.report(closed, now_s)
        if not closed:
            since_s, answered = None, False
        elif since_s is None:
            since_s = now_s
        missed = line.missed(in_contact, now_s)
        answered = answered or (in_contact and closed)
        if missed and not before:
            assert since_s is not None and now_s - since_s > 1.0 and not answered
        if in_contact:
            assert not missed
        before = missed


def test_monitor_is_blind_until_it_sees_a_contact() -> None:
    """A bar reported and not seen is a blinding cause, told once; the next bar that is seen ends it and is judged."""

    def told(effects: list[Effect]) -> list[bool]:
        conditions = [one["causes"] for one in records(effects, "condition")]
        return ["no_contact" in [cause["cause"] for cause in causes] for causes in conditions]

    station = monitor("C15")
    effects = station.bar_at_wheel(True, stamp(0.0))
    for tick in range(1, 30):
        effects += station.tick(stamp(tick / 10.0))
    effects += station.bar_at_wheel(False, stamp(3.0))
    assert told(effects) == [True]
    effects = station.bar_at_wheel(True, stamp(10.0)) + run(station, begin_s=10.0)
    assert told(effects) == [False]
    assert [one["verdict"] for one in records(effects, "bar")] == ["conforming"]
