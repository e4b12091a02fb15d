"""The recorder writes in order, waits while it cannot write, and gives up what it must, counted."""

import threading
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

from edgewatch.backoff import Backoff
from edgewatch.errors import DeviceError
from edgewatch.record.journal import Entry, Journal
from edgewatch.station.recorder import Batch, Recorder
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
