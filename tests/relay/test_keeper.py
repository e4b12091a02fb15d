"""The keeper holds the wanted level through loss and return, and reports each change once."""

from __future__ import annotations

import dataclasses
import queue
import threading
from collections.abc import Iterator
from pathlib import Path

import pytest

from edgewatch.errors import DeviceError
from edgewatch.relay.keeper import RelayKeeper, RelayReport
from edgewatch.relay.port import Relay, open_relay
from edgewatch.settings import RelaySettings
from tests.relay.boards import Board
from tests.relay.test_port import FRAMES, OFF, ON, prompt


class FakeRelay:
    """A relay whose faults are set by the test. ``level``: whether the line is stopped."""

    def __init__(self) -> None:
        self.level: bool | None = None
        self.broken = self.absent = False
        self.welded: bool | None = None
        self.log: list[str] = []
        self.opened = 0

    def open(self) -> Relay:
        """Open it, unless it is absent."""
        if self.absent:
            raise DeviceError("relay: no such port")
        self.opened += 1
        return self

    def apply(self, stop: bool) -> None:
        """Switch."""
        if self.broken:
            raise DeviceError("relay: does not answer")
        self.log.append("stop" if stop else "run")
        self.level = stop

    def read_back(self) -> bool | None:
        """What the contact says."""
        if self.broken:
            raise DeviceError("relay: does not answer")
        return self.welded if self.welded is not None else self.level

    def close(self, *, leave: bool = False) -> None:
        """Note how it was left."""
        self.log.append("left" if leave else "closed")


class Bench:
    """A keeper at work, and its reports as they come."""

    def __init__(self, opener: object, verify_s: float = 0.01) -> None:
        self.reports: queue.Queue[RelayReport] = queue.Queue()
        self.keeper = RelayKeeper(
            opener,  # type: ignore[arg-type]
            self.reports.put,
            chance=lambda: 0.0,
            verify_s=verify_s,
            first_s=0.002,
            most_s=0.01,
        )
        self.stop = threading.Event()
        self.thread = threading.Thread(target=self.keeper.run, args=(self.stop,))
        self.thread.start()

    def next(self) -> RelayReport:
        """The next report."""
        return self.reports.get(timeout=10.0)

    def close(self) -> None:
        """End the keeper."""
        self.stop.set()
        self.thread.join(10.0)
        assert not self.thread.is_alive()


@pytest.fixture
def relay() -> FakeRelay:
    """A relay in order."""
    return FakeRelay()


@pytest.fixture
def bench(relay: FakeRelay) -> Iterator[Bench]:
    """A keeper that reads back every 10 ms."""
    made = Bench(relay.open)
    yield made
    made.close()


def test_levels_are_applied_proved_and_reported(relay: FakeRelay, bench: Bench) -> None:
    """Each new level gives one report with its reason and read-back; the same level again gives none."""
    for stop, reason in ((False, "start"), (True, "bar 7 nonconforming"), (False, "released")):
        bench.keeper.set(stop, reason)
        bench.keeper.set(stop, "said twice")
        report = bench.next()
        assert (report.kind, report.stop, report.reason, report.read_back) == ("switched", stop, reason, stop)
        assert report.error == "" and report.seconds >= 0
    bench.close()
    assert bench.reports.empty()
    assert relay.log == ["run", "stop", "run", "closed"]


def test_nothing_is_switched_before_a_level_is_wanted(relay: FakeRelay, bench: Bench) -> None:
    """Opening the port alone moves nothing."""
    bench.close()
    assert relay.log in (["closed"], [])  # ended before or after the port was opened


def test_loss_is_reported_once_and_the_level_applied_again(relay: FakeRelay, bench: Bench) -> None:
    """Relay silent, then absent, then back: one failure, one restoration, the wanted level in force."""
    bench.keeper.set(True, "bar 7 nonconforming")
    assert bench.next().kind == "switched"
    relay.absent = relay.broken = True
    failure = bench.next()
    assert (failure.kind, failure.stop, failure.error) == ("failed", True, "relay: does not answer")
    relay.level = False  # the board lost its supply
    relay.absent = relay.broken = False
    restored = bench.next()
    assert (restored.kind, restored.stop, restored.read_back) == ("restored", True, True)
    assert relay.level is True and relay.opened >= 2
    bench.close()
    assert bench.reports.empty()


def test_new_level_during_a_loss_is_reported_and_kept(relay: FakeRelay, bench: Bench) -> None:
    """A stop that is wanted while the relay is gone fails aloud, and is applied when it is back."""
    relay.absent = relay.broken = True
    bench.keeper.set(False, "start")
    while bench.next().reason != "start":
        pass  # a failure before anything was wanted
    bench.keeper.set(True, "bar 9 nonconforming")
    failure = bench.next()
    assert (failure.kind, failure.stop, failure.reason) == ("failed", True, "bar 9 nonconforming")
    relay.absent = relay.broken = False
    assert bench.next().kind == "restored"
    assert [word for word in relay.log if word != "left"] == ["stop"]  # the older level was never applied


def test_welded_contact_is_a_failure(relay: FakeRelay, bench: Bench) -> None:
    """A relay that reads back the other level is said to have failed, at the switch or later."""
    bench.keeper.set(False, "start")
    assert bench.next().kind == "switched"
    relay.welded = True
    failure = bench.next()
    assert failure.kind == "failed" and "reads back as stopped, wanted is running" in failure.error
    relay.welded = None
    assert bench.next().kind == "restored"


def test_bug_in_the_report_leaves_the_line_on_the_safe_side(relay: FakeRelay) -> None:
    """What the callback raises ends the run with the relay closed; the supervisor may run it again."""

    def report(what: RelayReport) -> None:
        raise RuntimeError("bug")

    keeper = RelayKeeper(relay.open, report, chance=lambda: 0.0)
    keeper.set(True, "start")
    for _ in range(2):
        with pytest.raises(RuntimeError, match="bug"):
            keeper.run(threading.Event())
    assert relay.log == ["stop", "closed"] * 2


def test_real_board_pulled_and_plugged_in_again(tmp_path: Path) -> None:
    """A board on a pty goes away and another appears under the same name: the stop is in force on it by itself."""
    name = tmp_path / "ttyRELAY"
    first = Board({ON: True, OFF: False}, prompt)
    name.symlink_to(first.port)
    settings: RelaySettings = dataclasses.replace(FRAMES, port=str(name), energise_to="stop")
    bench = Bench(lambda: open_relay(settings), verify_s=0.02)
    bench.keeper.set(True, "bar 3 nonconforming")
    assert bench.next().kind == "switched" and first.energised
    name.unlink()
    first.pull()
    assert bench.next().kind == "failed"
    second = Board({ON: True, OFF: False}, prompt)
    name.symlink_to(second.port)
    report = bench.next()
    assert (report.kind, report.reason, report.read_back) == ("restored", "bar 3 nonconforming", True)
    assert second.energised
    bench.close()
    second.pull()
