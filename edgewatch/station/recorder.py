"""Writes what was seen: batches of records in, one transaction each, in order, from a thread of its own.

A card that is slow, full or locked never holds up the judging: batches wait in memory, up to a bound; beyond it the
oldest windows are given up first, then the oldest batches, and both are counted.
"""

from __future__ import annotations

import random
import threading
from collections import deque
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import Any, Protocol

from edgewatch.backoff import Backoff
from edgewatch.errors import DeviceError
from edgewatch.record.journal import Entry
from edgewatch.station.backlog import Backlog
from edgewatch.wire.messages import Stamp

MOST_WAITING = 20_000
"""Entries that wait in memory at most: about 20 MB, more than an hour of windows at full rate."""


class JournalLike(Protocol):
    """What the recorder needs of a journal."""

    def append(
        self, entries: Sequence[Entry], *, stamp: Stamp, state: Mapping[str, Any] | None = None
    ) -> tuple[int, ...]:
        """Record in one transaction."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Batch:
    """What belongs in one transaction."""

    entries: tuple[Entry, ...]
    state: Mapping[str, Any] = field(default_factory=dict)
    stamp: Stamp


class Recorder:
    """Takes batches and writes them in order. ``on_state(error or None, shed)`` is told when writing begins to fail,
    when entries are given up, and when it works again.
    """

    def __init__(
        self,
        journal: JournalLike,
        *,
        on_state: Callable[[DeviceError | None, int], None],
        on_written: Callable[[], None] = lambda: None,
        most_waiting: int = MOST_WAITING,
        backoff: Backoff | None = None,
    ) -> None:
        self._journal = journal
        self._on_state = on_state
        self._on_written = on_written
        self._most_waiting = most_waiting
        self._backoff = backoff or Backoff(random.random, first_s=0.2, most_s=10.0)
        self._backlog: Backlog[Batch] = Backlog()
        self._entries = 0
        self._shed = 0
        self._failing = False

    @property
    def waiting(self) -> int:
        """Entries that wait in memory."""
        return self._entries

    @property
    def shed(self) -> int:
        """Entries given up since the start."""
        return self._shed

    def put(self, batch: Batch) -> None:
        """Take a batch; never blocks."""
        with self._backlog.change:
            self._backlog.items.append(batch)
            self._entries += len(batch.entries)
            if self._entries > self._most_waiting:
                self._give_up()
            self._backlog.change.notify_all()

    def put_when_room(self, batch: Batch, *, room: int = 2_000) -> None:
        """Take a batch, waiting while ``room`` entries or more wait: for sources that can wait too (clips)."""
        with self._backlog.change:
            self._backlog.change.wait_for(lambda: self._entries < room or self._failing)
        self.put(batch)

    def flush(self, timeout_s: float) -> bool:
        """Wait until everything is written; say whether it is."""
        return self._backlog.flush(timeout_s)

    def work(self, stop: threading.Event) -> None:
        """Write until ``stop`` is set and nothing waits, or cannot be written; for a supervised thread."""
        while (batch := self._backlog.next(stop)) is not None:
            try:
                self._journal.append(batch.entries, stamp=batch.stamp, state=batch.state)
            except DeviceError as error:
                self._failed(error)
                if stop.is_set():
                    return
                stop.wait(self._backoff.next_s())
                continue
            finally:
                self._backlog.done()
            self._written(batch)

    def _written(self, batch: Batch) -> None:
        with self._backlog.change:
            if (
                self._backlog.items and self._backlog.items[0] is batch
            ):  # it may have been given up meanwhile: then it is kept twice
                self._backlog.items.popleft()
                self._entries -= len(batch.entries)
            recovered, self._failing = self._failing, False
            self._backlog.change.notify_all()
        if recovered:
            self._backoff.reset()
            self._on_state(None, self._shed)
        self._on_written()

    def _failed(self, error: DeviceError) -> None:
        with self._backlog.change:
            first, self._failing = not self._failing, True
            self._backlog.change.notify_all()
        if first:
            self._on_state(error, self._shed)

    def _give_up(self) -> None:
        """Make room: first the windows of all but the batch being written, then the oldest batches."""
        kept: deque[Batch] = deque()
        for position, batch in enumerate(self._backlog.items):
            if position == 0 and self._backlog.busy:
                kept.append(batch)
                continue
            entries = tuple(entry for entry in batch.entries if entry.kind != "window")
            if entries or batch.state:
                kept.append(batch if len(entries) == len(batch.entries) else replace(batch, entries=entries))
        before = self._entries
        self._backlog.items = kept
        self._entries = sum(len(batch.entries) for batch in kept)
        start = 1 if self._backlog.busy else 0
        while self._entries > self._most_waiting // 2 and len(self._backlog.items) > start:
            batch = self._backlog.items[start]
            del self._backlog.items[start]
            self._entries -= len(batch.entries)
        self._shed += before - self._entries
