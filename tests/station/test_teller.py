"""Lines of bars are handed on without holding up the judging, in order, and none of a clip is left out."""

import threading
from collections.abc import Mapping
from typing import Any

from edgewatch.station.supervise import Part
from edgewatch.station.teller import MOST_WAITING, Teller


def running(teller: Teller) -> Part:
    """The teller's thread, started."""
    part = Part("told", teller.work, on_fault=lambda name, error: None)
    part.start()
    return part


def test_a_held_terminal_holds_up_nobody_and_the_newest_lines_stay() -> None:
    """Nobody takes the first line: putting never blocks, and what waits is bounded."""
    held, told = threading.Event(), []

    def tell(line: Mapping[str, Any]) -> None:
        held.wait()
        told.append(line["bar"])

    teller = Teller(tell, on_failure=lambda: None)
    part = running(teller)
    for number in range(3 * MOST_WAITING):
        teller.put({"bar": number})
    assert not teller.flush(0.05)
    held.set()
    assert teller.flush(10.0)
    assert part.stop(5.0)
    assert told[-MOST_WAITING:] == list(range(2 * MOST_WAITING, 3 * MOST_WAITING))
    assert len(told) <= MOST_WAITING + 1  # the one in hand when the terminal was held


def test_a_source_that_can_wait_waits_and_loses_none() -> None:
    """A clip is read by a slow program: every line of it comes, in order."""
    go, told = threading.Event(), []

    def tell(line: Mapping[str, Any]) -> None:
        go.wait()
        told.append(line["bar"])

    teller = Teller(tell, on_failure=lambda: None)
    part = running(teller)

    def judge() -> None:
        for number in range(2 * MOST_WAITING):
            teller.put({"bar": number}, wait=True)

    judging = threading.Thread(target=judge)
    judging.start()
    judging.join(0.2)
    assert judging.is_alive()
    go.set()
    judging.join(10.0)
    assert teller.flush(None)
    assert part.stop(5.0)
    assert told == list(range(2 * MOST_WAITING))


def test_who_no_longer_listens_ends_the_run() -> None:
    """The reader of a pipe has gone: said once, nobody waits for it any more."""
    ended = threading.Event()

    def tell(line: Mapping[str, Any]) -> None:
        raise BrokenPipeError

    teller = Teller(tell, on_failure=ended.set)
    part = running(teller)
    for number in range(MOST_WAITING + 5):
        teller.put({"bar": number}, wait=True)
    assert ended.wait(5.0)
    assert isinstance(teller.failure, BrokenPipeError)
    assert teller.flush(None)
    assert part.stop(5.0)
