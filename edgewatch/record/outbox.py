"""The outbox table: what waits to be sent, how much it is, and how windows give way when the broker stays away."""

from __future__ import annotations

import sqlite3
from collections.abc import Sequence
from dataclasses import dataclass

from edgewatch.record import rows
from edgewatch.record.rows import DamagedError, Entry
from edgewatch.wire import messages

THIN_RUN = 2000
"""Windows looked at in one thinning step, so that a transaction stays short."""
THIN_REPORT = 1000
"""So many windows that gave way, at least, make one ``thinned`` record (and what is left makes the last one)."""
MOST_STRIDE = 2**20
"""At four windows a second, one in three days."""


@dataclass(slots=True, kw_only=True)
class Thinning:
    """How window messages are thinned: one in ``stride`` is sent; ``swept_to``: the sweep that brings older ones to the
    present stride has come to this ``seq`` (``None``: none is under way). ``count``, ``first``, ``last``: what gave way
    and is not recorded as ``thinned`` yet; ``total``: all that ever did.
    """

    stride: int = 1
    swept_to: int | None = None
    count: int = 0
    first: int = 0
    last: int = 0
    total: int = 0

    def __post_init__(self) -> None:
        numbers = (self.stride, self.swept_to or 0, self.count, self.first, self.last, self.total)
        if not (all(isinstance(number, int) for number in numbers) and 1 <= self.stride <= MOST_STRIDE):
            raise ValueError("the state of thinning is not one")

    def gave_way(self, seq: int) -> None:
        """Count one window."""
        self.first = min(self.first, seq) if self.count else seq
        self.last = max(self.last, seq)
        self.count += 1
        self.total += 1


class Outbox:
    """Counters beside the table, kept in step with it. Every method runs within the journal's transaction; after one
    that failed, ``count`` reads them anew.

    Above ``thin_bytes`` of windows only every second one is kept for sending, old and new alike; when that is reached
    again, every fourth, and so on; below a quarter of it all are kept again.
    """

    def __init__(self, thin_bytes: float) -> None:
        self._thin_bytes = thin_bytes
        self._window_bytes = 0
        self._place = 0
        self.unsent = 0
        self.unsent_bytes = 0
        self.unsent_room = 0
        self.thinning = Thinning()

    def count(self, db: sqlite3.Connection) -> None:
        """Count the table. Raises ``sqlite3.Error``, ``DamagedError``."""
        try:
            row = db.execute(
                "SELECT count(*), coalesce(sum(bytes), 0), coalesce(max(place), 0),"
                " coalesce(sum(CASE kind WHEN 'window' THEN bytes ELSE 0 END), 0) FROM outbox"
            ).fetchone()
            self.unsent, self.unsent_bytes, self._place, self._window_bytes = (int(part) for part in row)
            sizes = db.execute("SELECT bytes, count(*) FROM outbox GROUP BY bytes").fetchall()
            self.unsent_room = sum(rows.message_room(int(size)) * count for size, count in sizes)
            self.thinning = Thinning(**rows.state(db, "thinning", {}))
        except (TypeError, ValueError) as error:
            raise DamagedError(f"the outbox cannot be counted: {error}") from error

    def put(self, db: sqlite3.Connection, seq: int, entry: Entry, size: int) -> None:
        """Let the message of record ``seq`` wait to be sent, unless it is a window that gives way."""
        place = 0
        if entry.kind == "window":
            place = self._place = self._place + 1
            if place % self.thinning.stride:
                self.thinning.gave_way(seq)
                return
            self._window_bytes += size
        db.execute("INSERT INTO outbox VALUES (?, ?, ?, ?)", (seq, entry.kind, size, place))
        if entry.reply_topic:
            db.execute("INSERT INTO route VALUES (?, ?, ?)", (seq, entry.reply_topic, entry.correlation))
        self.unsent += 1
        self.unsent_bytes += size
        self.unsent_room += rows.message_room(size)

    def take(self, db: sqlite3.Connection, seqs: Sequence[int]) -> None:
        """Take messages out; unknown numbers do no harm."""
        for seq in seqs:
            row = db.execute("SELECT kind, bytes FROM outbox WHERE seq = ?", (seq,)).fetchone()
            if row is not None:
                db.execute("DELETE FROM outbox WHERE seq = ?", (seq,))
                db.execute("DELETE FROM route WHERE seq = ?", (seq,))
                self._gone(row[0], row[1])

    def _gone(self, kind: str, size: int) -> None:
        self.unsent -= 1
        self.unsent_bytes -= size
        self.unsent_room -= rows.message_room(size)
        if kind == "window":
            self._window_bytes -= size

    def thin(self, db: sqlite3.Connection) -> int | None:
        """Widen or end the thinning where it is time, and take one run of the sweep over older windows.

        Returns the lowest ``seq`` that gave way, ``None`` when none did.
        """
        now = self.thinning
        if now.stride > 1 and self._window_bytes < self._thin_bytes / 4:
            now.stride, now.swept_to = 1, None
        elif now.swept_to is None and self._window_bytes > self._thin_bytes and now.stride < MOST_STRIDE:
            now.stride, now.swept_to = now.stride * 2, 0
        if now.swept_to is None:
            return None
        run = db.execute(
            "SELECT seq, bytes, place FROM outbox WHERE kind = 'window' AND seq > ? ORDER BY seq LIMIT ?",
            (now.swept_to, THIN_RUN),
        ).fetchall()
        now.swept_to = run[-1][0] if len(run) == THIN_RUN else None  # the end: newer ones were thinned as they came
        gone = [(seq, size) for seq, size, place in run if place % now.stride]
        for seq, size in gone:
            db.execute("DELETE FROM outbox WHERE seq = ?", (seq,))
            now.gave_way(seq)
            self._gone("window", size)
        return gone[0][0] if gone else None

    def report(self) -> Entry | None:
        """Return the record that tells what gave way since the last one; ``None`` while it is too little to tell."""
        now = self.thinning
        if not now.count or (now.count < THIN_REPORT and now.stride > 1):
            return None
        body = messages.thinned(
            count=now.count, first_seq=now.first, last_seq=now.last, keep_every=now.stride, total=now.total
        )
        now.count = now.first = now.last = 0
        return Entry(kind="thinned", body=body)
