"""Writes what was seen: batches of records in, one transaction each, in order, from a thread of its own.

A card that is slow, full or locked never holds up the judging: batches wait in memory, up to a bound; beyond it the
oldest windows are given up first, then the oldest batches, and both are counted. A batch that the journal cannot take
in, whatever the state of the card, is written entry by entry after a few tries: only what cannot be written is lost,
and each loss is told.
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

ROOM = 100
"""A source that can wait does so while so many entries wait: twenty seconds of windows and bars at full rate. What the
queue once held stays with the process: a disk that was slow for 40 s made a soak 4.5 MB larger for good with 2000,
1.1 MB with 200."""

MOST_TRIES = 3
"""So often a batch is tried that raises what no card and no lock raises; the supervisor waits longer each time."""
MOST_TOLD = 2000
"""Characters of a refused entry that are told, so that what it held is not gone with it."""


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
    when entries are given up, and when it works again; ``on_refused(what)`` of each entry, or kept value, that the
    journal cannot take in: kind, error, content.
    """

    def __init__(
        self,
        journal: JournalLike,
        *,
        on_state: Callable[[DeviceError | None, int], None],
        on_written: Callable[[], None] = lambda: None,
        on_refused: Callable[[str], None] = lambda what: None,
        most_waiting: int = MOST_WAITING,
        backoff: Backoff | None = None,
    ) -> None:
        self._journal = journal
        self._on_state = on_state
        self._on_written = on_written
        self._on_refused = on_refused
        self._most_waiting = most_waiting
        self._backoff = backoff or Backoff(random.random, first_s=0.2, most_s=10.0)
        self._backlog: Backlog[Batch] = Backlog()
        self._entries = 0
        self._shed = 0
        self._refused = 0
        self._tried: Batch | None = None  # at the front, and has raised what is no failure of the world
        self._tries = 0
        self._failing = False

    @property
    def waiting(self) -> int:
        """Entries that wait in memory."""
        return self._entries

    @property
    def shed(self) -> int:
        """Entries given up since the start."""
        return self._shed

    @property
    def refused(self) -> int:
        """Entries and kept values that could not be written in any way since the start."""
        return self._refused

    def put(self, batch: Batch) -> None:
        """Take a batch; never blocks."""
        with self._backlog.change:
            self._backlog.items.append(batch)
            self._entries += len(batch.entries)
            if self._entries > self._most_waiting:
                self._give_up()
            self._backlog.change.notify_all()

    def put_when_room(self, batch: Batch, *, room: int = ROOM) -> None:
        """Take a batch, waiting while ``room`` entries or more wait: for sources that can wait too (clips)."""
        with self._backlog.change:
            self._backlog.change.wait_for(lambda: self._entries < room or self._failing)
        self.put(batch)

    def flush(self, timeout_s: float) -> bool:
        """Wait until everything is written; say whether it is."""
        return self._backlog.flush(timeout_s)

    def work(self, stop: threading.Event) -> None:
        """Write until ``stop`` is set and nothing waits, or cannot be written; for a supervised thread.

        Raises what the journal raises besides ``DeviceError``; the batch is then tried again, ``MOST_TRIES`` times.
        """
        while (batch := self._backlog.next(stop)) is not None:
            try:
                if batch is self._tried and self._tries >= MOST_TRIES:
                    self._write_apart(batch)
                    continue
                self._journal.append(batch.entries, stamp=batch.stamp, state=batch.state)
            except DeviceError as error:
                self._failed(error)
                if stop.is_set():
                    return
                stop.wait(self._backoff.next_s())
                continue
            except Exception:  # a bug, not the world: counted, and raised again for the supervisor to tell
                self._tries = self._tries + 1 if batch is self._tried else 1
                self._tried = batch
                if stop.is_set() and self._tries <= MOST_TRIES:
                    continue  # nobody would start this thread again
                raise
            finally:
                self._backlog.done()
            self._written(batch)

    def _write_apart(self, batch: Batch) -> None:
        """Write the front batch piece by piece; what is refused by itself is told and left out.

        The kept values come first: a power cut between two pieces must not have a number used twice, or the line
        running that was stopped. Raises ``DeviceError`` with the pieces written so far taken out of the batch, and
        whatever even an empty transaction raises: then it is not the batch.
        """
        self._journal.append((), stamp=batch.stamp)
        for key, value in batch.state.items():
            self._write_piece(f"kept value {key}", value, batch, state={key: value})
            batch = self._replace_front(
                batch, replace(batch, state={name: kept for name, kept in batch.state.items() if name != key})
            )
        while batch.entries:
            entry = batch.entries[0]
            self._write_piece(entry.kind, entry.body, batch, entries=(entry,))
            batch = self._replace_front(batch, replace(batch, entries=batch.entries[1:]))
        self._tried = None
        self._written(batch)

    def _write_piece(
        self,
        name: str,
        content: object,
        batch: Batch,
        *,
        entries: tuple[Entry, ...] = (),
        state: Mapping[str, Any] | None = None,
    ) -> None:
        try:
            self._journal.append(entries, stamp=batch.stamp, state=state)
        except DeviceError:
            raise
        except Exception as error:  # noqa: BLE001 - whatever it is, what waits behind this piece must be written
            self._refused += 1
            what = f"{name}: {type(error).__name__}: {error}: {content!r}"
            self._on_refused(what.encode("utf-8", "backslashreplace").decode()[:MOST_TOLD])

    def _replace_front(self, batch: Batch, rest: Batch) -> Batch:
        """Put what is left of the batch in hand in its place."""
        with self._backlog.change:
            self._backlog.items[0] = self._tried = rest
            self._entries -= len(batch.entries) - len(rest.entries)
        return rest

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
