"""How full the outbox is said to be, and for how long it will last."""

from __future__ import annotations

import pytest

from edgewatch.judge.causes import CAUSES, MAINTENANCE
from edgewatch.monitor.filling import NEARLY, RELIEVED, Filling
from edgewatch.monitor.monitor import Monitor
from edgewatch.settings import read_settings
from edgewatch.wire.messages import Stamp

ROOM = 512e6


def at(filling: Filling, hours: float, share: float, unsent: int = 1000) -> str:
    """What is said at this time with this share of the room taken."""
    return filling.update(hours * 3600, unsent=unsent, used_bytes=share * ROOM, room_bytes=ROOM)


def test_it_is_said_before_the_limit_with_the_time_left() -> None:
    """One percent an hour: silent below 80 %, then twenty hours are left, then nineteen."""
    filling = Filling()
    for minute in range(79 * 60):
        assert at(filling, minute / 60, minute / 6000) == ""
    assert at(filling, 80, NEARLY) == "1000 unsent, 410 MB of 512 MB; at this rate full in 20 h"
    assert at(filling, 81, 0.81).endswith("full in 19 h")
    assert at(filling, 100, 1.0).endswith("it is full")
    assert at(filling, 101, 1.3).endswith("it is full")


def test_the_rate_is_that_of_the_last_hour() -> None:
    """Days of quiet nights do not hide that it now comes in fast."""
    filling = Filling()
    for minute in range(100 * 60):
        at(filling, minute / 60, 0.1)
    for minute in range(60):
        at(filling, 100 + minute / 60, 0.1 + 0.7 * minute / 60)
    assert at(filling, 101, 0.8).endswith("full in 0 h")


def test_it_ends_well_below_where_it_began() -> None:
    """A share that moves about 80 % makes one alert, not many."""
    filling = Filling()
    said = [bool(at(filling, hour, share)) for hour, share in enumerate((0.79, 0.81, 0.79, 0.81, 0.71, 0.69, 0.79))]
    assert said == [False, True, True, True, True, False, False]
    assert RELIEVED < NEARLY


def test_a_stop_at_the_line_and_a_long_look_away() -> None:
    """Nothing comes in: no time can be named. At the first look none either."""
    filling = Filling()
    assert at(filling, 0, 0.9).endswith("not growing")
    assert at(filling, 100, 0.9).endswith("not growing")
    assert "at this rate full in 42 days" in said_after(0.8, 0.801, hours=5.0625)


def said_after(before: float, after: float, *, hours: float) -> str:
    """What is said when the share went from one to the other."""
    filling = Filling()
    at(filling, 0, before)
    return at(filling, hours, after)


def test_nothing_unsent_is_never_nearly_full() -> None:
    """A disk without a byte left is the recorder's to tell."""
    assert Filling().update(0.0, unsent=0, used_bytes=0.0, room_bytes=0.0) == ""


@pytest.mark.parametrize("cause", ["outbox_filling", "journal_damaged", "records_aside"])
def test_what_threatens_records_is_an_alert(cause: str) -> None:
    """Condition and alert both name it, with the detail, and both end with it."""
    assert CAUSES[cause].condition == MAINTENANCE
    monitor = Monitor(read_settings({}, file="x"), bands={}, live=True)
    stamp = Stamp(boot="b", monotonic_s=1.0, utc_s=1e9, synced=True)
    monitor.begin(stamp)
    effects = monitor.complain({cause: True}, stamp, detail="41 of 50 MB")
    texts = [str(effect) for effect in effects]
    assert any("alert" in text and "41 of 50 MB" in text and "raised" in text for text in texts)
    assert any("condition" in text and cause in text for text in texts)
    texts = [str(effect) for effect in monitor.complain({cause: False}, stamp)]
    assert any("alert" in text and "cleared" in text for text in texts)


def test_the_ticks_carry_it() -> None:
    """While ``Filling`` says something the condition names it; it goes when that is over."""
    monitor = Monitor(read_settings({}, file="x"), bands={}, live=True)
    stamp = Stamp(boot="b", monotonic_s=1.0, utc_s=1e9, synced=True)
    monitor.begin(stamp)
    assert any("outbox_filling" in str(one) for one in monitor.tick(stamp, unsent=9, filling="9 unsent"))
    assert not any("outbox_filling" in str(one) for one in monitor.tick(stamp, unsent=9, filling="10 unsent"))
    assert any("cleared" in str(one) for one in monitor.tick(stamp, unsent=1))
