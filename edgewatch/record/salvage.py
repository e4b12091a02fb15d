"""What can still be read from a damaged journal: states kept, and records whose message was not sent yet."""

from __future__ import annotations

import json
import sqlite3
from collections.abc import Iterator
from pathlib import Path
from typing import Any

from edgewatch.record.rows import FAILURES, checksum
from edgewatch.wire.kinds import KINDS

MOST_RECORDS = 1_000_000
"""A damaged table of numbers may go round in circles; no outbox holds more."""


def salvage(damaged: Path, db: sqlite3.Connection) -> tuple[int, int]:
    """Copy what is whole from ``damaged`` into the new file ``db``, within the caller's transaction.

    What ``db`` has already stays as it is.
    Unsent records keep their numbers and go out as if nothing had happened; only those that match their check sum are
    taken. Returns how many records and states were saved. Nothing that the damaged file does raises.
    """
    old = sqlite3.connect(f"{damaged.absolute().as_uri()}?mode=ro", uri=True)
    try:
        records = sum(_keep_record(db, row) for row in _rows(old, _UNSENT))
        states = sum(_keep_state(db, row) for row in _rows(old, "SELECT key, value FROM state"))
        for row in _rows(old, "SELECT kind, seq, crc, payload FROM latest"):
            _keep_latest(db, row)
        for row in _rows(old, "SELECT bar, grade, who, utc_s FROM finding"):
            if [type(part) for part in row] == [int, str, str, float]:
                db.execute("INSERT INTO finding VALUES (?, ?, ?, ?)", row)
    finally:
        old.close()
    return records, states


_UNSENT = (
    "SELECT record.seq, record.kind, boot.name, record.monotonic_s, record.utc_s, record.synced, record.crc,"
    " record.payload, outbox.place FROM outbox JOIN record USING (seq) LEFT JOIN boot ON boot.id = record.boot"
    " ORDER BY outbox.seq"
)


def _rows(old: sqlite3.Connection, query: str) -> Iterator[Any]:
    """Yield rows until the damage is met."""
    try:
        for number, row in enumerate(old.execute(query)):
            if number >= MOST_RECORDS:
                return
            yield row
    except (*FAILURES, OverflowError):
        return


def _keep_record(db: sqlite3.Connection, row: Any) -> bool:
    seq, kind, boot, monotonic_s, utc_s, synced, check, payload, place = row
    whole = (
        isinstance(seq, int)
        and seq > 0
        and isinstance(payload, bytes)
        and checksum(seq, payload) == check
        and kind in KINDS
        and isinstance(monotonic_s, float)
        and isinstance(utc_s, float)
        and isinstance(place, int)
    )
    if not whole:
        return False
    db.execute("INSERT OR IGNORE INTO boot(name) VALUES (?)", (str(boot),))
    (number,) = db.execute("SELECT id FROM boot WHERE name = ?", (str(boot),)).fetchone()
    kept = db.execute(
        "INSERT OR IGNORE INTO record VALUES (?, ?, ?, ?, ?, ?, ?, ?)",
        (seq, kind, number, monotonic_s, utc_s, bool(synced), check, payload),
    )
    if kept.rowcount == 1:
        db.execute("INSERT INTO outbox VALUES (?, ?, ?, ?)", (seq, kind, len(payload), place))
    return kept.rowcount == 1


def _keep_state(db: sqlite3.Connection, row: Any) -> bool:
    key, value = row
    try:
        json.loads(value)
    except (TypeError, ValueError, RecursionError):
        return False
    if not isinstance(key, str) or key == "floor":
        return False
    db.execute("INSERT OR IGNORE INTO state VALUES (?, ?)", (key, value))
    return True


def _keep_latest(db: sqlite3.Connection, row: Any) -> None:
    kind, seq, check, payload = row
    if isinstance(seq, int) and isinstance(payload, bytes) and checksum(seq, payload) == check and kind in KINDS:
        db.execute("INSERT OR IGNORE INTO latest VALUES (?, ?, ?, ?)", row)
