"""The recorder writes in order, waits while it cannot write, and gives up what it must, counted."""

import threading
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any, cast

import pytest

from edgewatch.backoff import Backoff
from edgewatch.errors import DeviceError
from edgewatch.record.journal import Entry, Journal
from edgewatch.station.recorder import MOST_TRIES, ROOM, Batch, Recorder
from edgewatch.station.supervise import Part
from edgewatch.wire.messages import Stamp

STAMP = Stamp(boot="b", monotonic_s=1.0, utc_s=1.79e9, synced=True)


def window(number: int) -> Batch:
    """One window in a batch of its own."""
    return Batch(entries=(Entry(kind="window", body={"bar": number}),), stamp=STAMP)


def bar(number: int) -> Batch:
    """One bar in a batch of its own."""
    return Batch(entries=(Entry(kind="bar", body={"bar": number}),), state={"bar": number}, stamp=STAMP)


class Moody:
    """A journal that fails as long as it is told to."""

    def __init__(self) -> None:
        self.broken = threading.Event()
        self.tried = threading.Event()
        self.kept: list[tuple[str, Any]] = []

    def append(
        self, entries: Sequence[Entry], *, stamp: Stamp, state: Mapping[str, Any] | None = None
    ) -> tuple[int, ...]:
        """Keep the entries, or fail."""
        if self.broken.is_set():
            self.tried.set()
            raise DeviceError("disk full")
        self.kept += [(entry.kind, entry.body["bar"]) for entry in entries]
        return tuple(range(len(entries)))


def running(recorder: Recorder) -> Part:
    """The recorder's thread, started."""
    part = Part("recorder", recorder.work, on_fault=lambda name, error: None)
    part.start()
    return part


def test_batches_reach_a_real_journal_in_order(tmp_path: Path) -> None:
    """Order, state and sequence are the journal's."""
    journal = Journal(tmp_path / "j.sqlite")
    recorder = Recorder(journal, on_state=lambda error, shed: None)
    for number in range(50):
        recorder.put(window(number))
    recorder.put(bar(50))
    part = running(recorder)
    assert recorder.flush(10.0)
    assert part.stop(5.0)
    rows = journal.rows()
    assert [row.payload["bar"] for row in rows] == list(range(51))
    assert [row.seq for row in rows] == list(range(rows[0].seq, rows[0].seq + 51))
    assert journal.state("bar") == 50
    journal.close()


def test_failure_is_said_once_and_nothing_is_lost() -> None:
    """While the disk is full batches wait; afterwards all are written, in order."""
    journal = Moody()
    journal.broken.set()
    said: list[str] = []
    recorder = Recorder(
        journal,
        on_state=lambda error, shed: said.append(str(error)),
        backoff=Backoff(lambda: 0.5, first_s=0.001, most_s=0.002),
    )
    part = running(recorder)
    for number in range(20):
        recorder.put(bar(number))
    assert journal.tried.wait(5.0)
    journal.broken.clear()
    assert recorder.flush(10.0)
    part.stop(5.0)
    assert journal.kept == [("bar", number) for number in range(20)]
    assert said == ["disk full", "None"]
    assert recorder.shed == 0


def test_windows_are_given_up_before_bars() -> None:
    """Memory is bounded: windows go first, bars last, and what went is counted."""
    journal = Moody()
    recorder = Recorder(journal, on_state=lambda error, shed: None, most_waiting=100)
    for number in range(90):
        recorder.put(window(number))
    for number in range(90, 105):
        recorder.put(bar(number))
    assert recorder.shed == 90
    part = running(recorder)
    assert recorder.flush(10.0)
    part.stop(5.0)
    assert journal.kept == [("bar", number) for number in range(90, 105)]


def test_oldest_bars_go_when_there_are_no_windows_left() -> None:
    """A journal away for very long: the newest bars are kept, the count is told."""
    recorder = Recorder(Moody(), on_state=lambda error, shed: None, most_waiting=100)
    for number in range(101):
        recorder.put(bar(number))
    assert recorder.waiting == 50
    assert recorder.shed == 51


def test_a_source_that_can_wait_waits_for_a_slow_disk() -> None:
    """A clip is judged faster than a slow disk takes records: few of them wait in memory, and none is lost."""
    slow, waited = threading.Event(), []

    class Slow(Moody):
        def append(
            self, entries: Sequence[Entry], *, stamp: Stamp, state: Mapping[str, Any] | None = None
        ) -> tuple[int, ...]:
            """Keep the entries once the disk has come round."""
            slow.wait()
            waited.append(recorder.waiting)
            return super().append(entries, stamp=stamp, state=state)

    journal = Slow()
    recorder = Recorder(journal, on_state=lambda error, shed: None)
    part = running(recorder)

    def judge() -> None:
        for number in range(3 * ROOM):
            recorder.put_when_room(window(number))

    judging = threading.Thread(target=judge)
    judging.start()
    judging.join(0.2)
    assert judging.is_alive()
    slow.set()
    judging.join(10.0)
    assert recorder.flush(10.0)
    part.stop(5.0)
    assert max(waited) == ROOM
    assert journal.kept == [("window", number) for number in range(3 * ROOM)]


def test_stop_with_a_broken_disk_ends() -> None:
    """A stop does not hang on a disk that stays full."""
    journal = Moody()
    journal.broken.set()
    recorder = Recorder(journal, on_state=lambda error, shed: None)
    part = running(recorder)
    recorder.put(bar(1))
    assert journal.tried.wait(5.0)
    assert part.stop(5.0)
    assert not recorder.flush(0.0)


def poisoned(number: int, *, kind: str = "bar") -> Entry:
    """An entry that no journal can take in: its body is no JSON."""
    return Entry(kind=kind, body={"bar": number, "odd": object()})


def test_only_what_cannot_be_written_is_left_out(tmp_path: Path) -> None:
    """One entry of a batch and one kept value are no JSON: they are told, the rest of the batch and of all is kept."""
    journal = Journal(tmp_path / "j.sqlite")
    faults: list[str] = []
    refused: list[str] = []
    recorder = Recorder(journal, on_state=lambda error, shed: None, on_refused=refused.append)
    part = Part(
        "recorder",
        recorder.work,
        on_fault=lambda name, error: faults.append(type(error).__name__),
        backoff=Backoff(lambda: 0.5, first_s=0.001, most_s=0.002),
    )
    recorder.put(bar(1))
    good = window(2).entries
    recorder.put(Batch(entries=(*good, poisoned(3), *bar(4).entries), state={"odd": object(), "bar": 4}, stamp=STAMP))
    recorder.put(bar(5))
    part.start()
    assert recorder.flush(10.0)
    assert part.stop(5.0)
    rows = journal.rows()
    assert [row.payload["bar"] for row in rows] == [1, 2, 4, 5]
    assert [row.seq for row in rows] == [1, 2, 3, 4]
    assert (journal.state("bar"), journal.state("odd")) == (5, None)
    assert faults == ["ValueError"] * MOST_TRIES
    assert recorder.refused == len(refused) == 2
    assert recorder.waiting == recorder.shed == 0
    assert refused[0].startswith("kept value odd: ValueError")
    assert refused[1].startswith("bar: ValueError") and "'bar': 3" in refused[1]
    journal.close()


@pytest.mark.parametrize(
    "entry",
    [
        poisoned(1),
        Entry(kind="bar", body={"bar": 1}, reply_topic="\udcff"),
        Entry(kind="bar", body={"bar": 1}, reply_topic=cast(str, ["no", "topic"])),
    ],
)
def test_no_kind_of_poison_blocks_the_rest(tmp_path: Path, entry: Entry) -> None:
    """No JSON, no UTF-8, nothing that SQLite takes: left out and told, also when the stop is near."""
    journal = Journal(tmp_path / "j.sqlite")
    refused: list[str] = []
    recorder = Recorder(journal, on_state=lambda error, shed: None, on_refused=refused.append)
    recorder.put(Batch(entries=(entry,), stamp=STAMP))
    recorder.put(bar(2))
    stop = threading.Event()
    stop.set()
    recorder.work(stop)
    assert [row.payload["bar"] for row in journal.rows()] == [2]
    assert len(refused) == 1
    journal.close()


class Odd(Moody):
    """A journal with a fault of its own: everything raises what is no failure of the world, while it lasts."""

    def append(
        self, entries: Sequence[Entry], *, stamp: Stamp, state: Mapping[str, Any] | None = None
    ) -> tuple[int, ...]:
        """Keep the entries, or raise."""
        if self.broken.is_set():
            self.tries += 1
            if self.tries > 3 * MOST_TRIES:
                self.broken.clear()
            raise RuntimeError("odd")
        return super().append(entries, stamp=stamp, state=state)

    tries = 0


def test_a_journal_that_takes_nothing_is_no_poisoned_batch() -> None:
    """While not even an empty transaction is taken, everything waits and nothing is left out."""
    journal = Odd()
    journal.broken.set()
    refused: list[str] = []
    recorder = Recorder(journal, on_state=lambda error, shed: None, on_refused=refused.append)
    quick = Backoff(lambda: 0.5, first_s=0.001, most_s=0.002)
    part = Part("recorder", recorder.work, on_fault=lambda name, error: None, backoff=quick)
    for number in range(3):
        recorder.put(bar(number))
    part.start()
    assert recorder.flush(10.0)
    part.stop(5.0)
    assert journal.kept == [("bar", number) for number in range(3)]
    assert not refused


class FullMidway(Moody):
    """The disk is full once, after the first piece of a batch that is written apart."""

    def append(
        self, entries: Sequence[Entry], *, stamp: Stamp, state: Mapping[str, Any] | None = None
    ) -> tuple[int, ...]:
        """Refuse poison; fail once."""
        if any("odd" in entry.body for entry in entries):
            raise TypeError("odd")
        if self.kept and not self.tried.is_set() and entries:
            self.tried.set()
            raise DeviceError("disk full")
        return super().append(entries, stamp=stamp, state=state)


def test_a_disk_that_fills_between_two_pieces_writes_none_twice() -> None:
    """What has been written of the batch is not written again."""
    journal = FullMidway()
    quick = Backoff(lambda: 0.5, first_s=0.001, most_s=0.002)
    said: list[str] = []
    recorder = Recorder(journal, on_state=lambda error, shed: said.append(str(error)), backoff=quick)
    part = Part("recorder", recorder.work, on_fault=lambda name, error: None, backoff=quick)
    recorder.put(Batch(entries=(*bar(1).entries, *bar(2).entries, poisoned(3), *bar(4).entries), stamp=STAMP))
    part.start()
    assert recorder.flush(10.0)
    part.stop(5.0)
    assert journal.kept == [("bar", 1), ("bar", 2), ("bar", 4)]
    assert said == ["disk full", "None"]
    assert (recorder.refused, recorder.waiting) == (1, 0)
