"""What lies in a journal file: its tables, its records, and the checks that tell it from any other file."""

from __future__ import annotations

import json
import sqlite3
import zlib
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from edgewatch.errors import DeviceError
from edgewatch.wire.kinds import KINDS
from edgewatch.wire.messages import Stamp
from edgewatch.wire.outgoing import Outgoing

APPLICATION_ID = 0x65647761
"""``edwa``: marks the file as ours in SQLite's header, so that another program's database is never written to."""
SCHEMA_VERSION = 1
BUSY_S = 1.0
"""Longest wait for another process that holds the file locked."""
CHECK_WHOLE_BYTES = 64_000_000
"""Up to this size the whole file is checked when opened (0.1 s on a desk computer, about 3 s from an SD card); a larger
one is checked as it is read: each record carries its own check sum."""
READ_RUN = 500
"""Records read in one step: half a megabyte in memory, milliseconds with a snapshot held."""
PAGE_BYTES = 2048
"""A transaction writes whole pages: a quarter less on the card than with 4096, as measured (1024: a third less, but
then most bars spill over several pages)."""

_TABLES = """
CREATE TABLE boot(id INTEGER PRIMARY KEY, name TEXT NOT NULL UNIQUE);
CREATE TABLE record(
  seq INTEGER PRIMARY KEY, kind TEXT NOT NULL, boot INTEGER NOT NULL, monotonic_s REAL NOT NULL, utc_s REAL NOT NULL,
  synced INTEGER NOT NULL, crc INTEGER NOT NULL, payload BLOB NOT NULL);
CREATE TABLE outbox(seq INTEGER PRIMARY KEY, kind TEXT NOT NULL, bytes INTEGER NOT NULL, place INTEGER NOT NULL);
CREATE TABLE route(seq INTEGER PRIMARY KEY, topic TEXT NOT NULL, correlation BLOB NOT NULL);
CREATE TABLE state(key TEXT PRIMARY KEY, value TEXT NOT NULL) WITHOUT ROWID;
CREATE TABLE latest(kind TEXT PRIMARY KEY, seq INTEGER NOT NULL, crc INTEGER NOT NULL, payload BLOB NOT NULL)
  WITHOUT ROWID;
CREATE TABLE finding(bar INTEGER NOT NULL, grade TEXT NOT NULL, who TEXT NOT NULL, utc_s REAL NOT NULL);
"""
# record is only ever appended to and pruned; what changes often (outbox) is small, so few pages are written twice.


@dataclass(frozen=True, slots=True, kw_only=True)
class Entry:
    """One thing to record: its kind (``edgewatch.wire.kinds``) and body (``edgewatch.wire.messages``).

    ``reply_topic``, ``correlation``: where else the answer to an order goes (MQTT 5 response topic).
    """

    kind: str
    body: Mapping[str, Any] = field(hash=False)
    reply_topic: str = ""
    correlation: bytes = b""

    def __post_init__(self) -> None:
        if self.kind not in KINDS or not KINDS[self.kind].journalled:
            raise ValueError(f"kind = {self.kind!r}: is not journalled")


@dataclass(frozen=True, slots=True, kw_only=True)
class Row:
    """One record as it is read back; ``unsent``: its message still waits in the outbox."""

    seq: int
    kind: str
    stamp: Stamp
    payload: dict[str, Any] = field(hash=False)
    unsent: bool


@dataclass(frozen=True, slots=True, kw_only=True)
class JournalStatus:
    """Size and backlog. ``unsent`` messages and their ``unsent_bytes``; ``windows_thinned``: window messages that gave
    way since the journal began; ``used_bytes``: pages in use; ``next_seq``: what the next record will get;
    ``unsent_room_bytes``: room in the file that the unsent ones take, about; ``room_bytes``: what they may take, as the
    size limit and the disk have it. ``aside``: damaged files whose unsent records could not be taken over yet, of
    ``aside_bytes`` together.
    """

    unsent: int
    unsent_bytes: int
    windows_thinned: int
    used_bytes: int
    next_seq: int
    unsent_room_bytes: int = 0
    room_bytes: int = 0
    aside: int = 0
    aside_bytes: int = 0


_COLUMNS_BYTES = 47
"""What a record takes beside its payload: its other columns, and its place in the page."""
_WAITING_BYTES = 22
"""What its row in the outbox takes."""


def message_room(size: int) -> int:
    """Return the room that a waiting message of ``size`` bytes takes in the file: a page holds a whole number."""
    cell = size + _COLUMNS_BYTES
    return max(PAGE_BYTES // max(1, (PAGE_BYTES - 8) // cell), cell) + _WAITING_BYTES


class DamagedError(Exception):
    """The file can be opened and read, and what it holds is not right."""


_WORLD = ("locked", "busy", "full", "I/O", "unable to open", "readonly", "interrupted", "out of memory", "denied")
"""Words in SQLite's texts of errors that lie outside the file. Python 3.10 does not give the error's code."""


FAILURES = (sqlite3.Error, UnicodeDecodeError)
"""What reading a file can raise: SQLite's errors, and the decoding of an error text that quotes a damaged table."""


def translated(error: Exception, path: Path) -> Exception:
    """Return what a failure means: ``DeviceError`` for the world's failures, ``DamagedError`` for the file's,
    ``TypeError`` for a value that SQLite does not take: trying again does not help.
    """
    text = str(error)
    if "binding parameter" in text:
        return TypeError(f"journal {path}: {text}")
    outside = isinstance(error, sqlite3.OperationalError) and any(word in text for word in _WORLD)
    if outside or isinstance(error, (sqlite3.ProgrammingError, sqlite3.InterfaceError)):
        remedy = "free some space" if "full" in text else "see that it is there, writable and not in use"
        return DeviceError(f"journal {path}: {text}; {remedy}")
    return DamagedError(text)


def checksum(seq: int, payload: bytes) -> int:
    """CRC-32 of a record: its number and its payload, so that neither an altered nor a misplaced one passes."""
    return zlib.crc32(payload, zlib.crc32(seq.to_bytes(8, "big", signed=True)))


def begin_file(db: sqlite3.Connection) -> None:
    """Make the tables of a new file, within the caller's transaction."""
    for statement in _TABLES.split(";"):
        db.execute(statement)
    db.execute(f"PRAGMA application_id = {APPLICATION_ID}")
    db.execute(f"PRAGMA user_version = {SCHEMA_VERSION}")


def _head(path: Path) -> bytes:
    with path.open("rb") as file:
        return file.read(100)


def is_sqlite(path: Path) -> bool:
    """Whether the file is empty or begins as section 1.3 of SQLite's file format has it.

    SQLite itself takes a file shorter than its header for an empty one and would write over it, and opens one with
    unknown format versions (bytes 18, 19) for reading only.
    """
    head = _head(path)
    return not head or (head.startswith(b"SQLite format 3\0") and head[18:20] in (b"\1\1", b"\2\2"))


def has_our_header(path: Path) -> bool:
    """Whether the header is SQLite's with our application id."""
    try:
        head = _head(path)
    except OSError:
        return False
    return head.startswith(b"SQLite format 3\0") and head[68:72] == APPLICATION_ID.to_bytes(4, "big")


def check_ours(db: sqlite3.Connection, path: Path) -> None:
    """Raise ``DeviceError`` for a journal of a newer version, ``DamagedError`` for any other foreign content."""
    tables = {row[0] for row in db.execute("SELECT name FROM sqlite_master WHERE type = 'table'")}
    if not tables:
        return
    if int(db.execute("PRAGMA application_id").fetchone()[0]) != APPLICATION_ID:
        raise DamagedError("its application id is not ours")
    version = int(db.execute("PRAGMA user_version").fetchone()[0])
    if version > SCHEMA_VERSION:
        raise DeviceError(f"journal {path}: was written by a newer version (format {version})")
    missing = {"boot", "record", "outbox", "route", "state", "latest", "finding"} - tables
    if missing or version != SCHEMA_VERSION:
        raise DamagedError(f"format {version}, tables missing: {', '.join(sorted(missing)) or 'none'}")


def check_whole(db: sqlite3.Connection) -> None:
    """Check the whole file: SQLite's own structures. Raises ``DamagedError``."""
    found = db.execute("PRAGMA quick_check(1)").fetchone()[0]
    if found != "ok":
        raise DamagedError(str(found))


def newest(db: sqlite3.Connection) -> int | None:
    """Return the highest ``seq`` recorded, ``None`` when there is none."""
    value = db.execute("SELECT max(seq) FROM record").fetchone()[0]
    return None if value is None else int(value)


def checked(seq: Any, check: Any, payload: Any) -> bytes:
    """Return the payload when it matches its check sum. Raises ``DamagedError``."""
    if not isinstance(seq, int) or not isinstance(payload, bytes) or checksum(seq, payload) != check:
        raise DamagedError(f"record {seq} does not match its check sum")
    return payload


def pending(db: sqlite3.Connection, limit: int, after: int) -> list[Outgoing]:
    """Return up to ``limit`` messages of the outbox above ``after``."""
    found = []
    for seq, kind, check, payload, topic, correlation in db.execute(
        "SELECT outbox.seq, record.kind, record.crc, record.payload, route.topic, route.correlation FROM outbox"
        " LEFT JOIN record USING (seq) LEFT JOIN route USING (seq) WHERE outbox.seq > ? ORDER BY outbox.seq LIMIT ?",
        (after, limit),
    ):
        whole = checked(seq, check, payload)
        if kind not in KINDS:
            raise DamagedError(f"record {seq} is of an unknown kind")
        found.append(
            Outgoing(seq=seq, kind=kind, payload=whole, reply_topic=topic or "", correlation=correlation or b"")
        )
    return found


def latest(db: sqlite3.Connection, kind: str) -> tuple[int, bytes] | None:
    """Return ``seq`` and payload of the newest record of a state kind."""
    row = db.execute("SELECT seq, crc, payload FROM latest WHERE kind = ?", (kind,)).fetchone()
    return None if row is None else (int(row[0]), checked(row[0], row[1], row[2]))


def state(db: sqlite3.Connection, key: str, default: Any) -> Any:
    """Return the value kept under ``key``."""
    row = db.execute("SELECT value FROM state WHERE key = ?", (key,)).fetchone()
    if row is None:
        return default
    try:
        return json.loads(row[0])
    except (ValueError, TypeError, RecursionError) as error:
        raise DamagedError(f"state {key!r} cannot be read: {error}") from error


def read_rows(
    db: sqlite3.Connection,
    kind: str | None = None,
    since_utc_s: float | None = None,
    until_utc_s: float | None = None,
    last: int | None = None,
) -> Iterator[Row]:
    """Yield records in the order of ``seq``. Raises ``sqlite3.Error`` and ``DamagedError``.

    Read in steps, none of which is left open while the caller works: while a reader holds a snapshot the write-ahead
    log of the station cannot begin anew, and would grow for as long as somebody leaves a listing open.
    """
    wanted = [
        ("record.kind = ?", kind),
        ("record.utc_s >= ?", since_utc_s),
        ("record.utc_s < ?", until_utc_s),
    ]
    given = [(clause, value) for clause, value in wanted if value is not None]
    where = " AND ".join(clause for clause, _ in given) or "1"
    query = (
        "SELECT record.seq, record.kind, boot.name, record.monotonic_s, record.utc_s, record.synced, record.crc,"
        " record.payload, outbox.seq IS NOT NULL FROM record LEFT JOIN boot ON boot.id = record.boot"
        f" LEFT JOIN outbox USING (seq) WHERE {where} ORDER BY record.seq"
    )
    values: list[Any] = [value for _, value in given]
    if last is None:
        found: Iterable[Any] = _in_steps(db, query.replace("WHERE", "WHERE record.seq > ? AND", 1), values)
    else:
        found = reversed(db.execute(f"{query} DESC LIMIT ?", [*values, last]).fetchall())
    for seq, name, boot, monotonic_s, utc_s, synced, check, payload, unsent in found:
        try:
            stamp = Stamp(boot=str(boot), monotonic_s=float(monotonic_s), utc_s=float(utc_s), synced=bool(synced))
            content = json.loads(checked(seq, check, payload))
        except (TypeError, ValueError, RecursionError) as error:
            raise DamagedError(f"record {seq} cannot be read: {error}") from error
        yield Row(seq=seq, kind=str(name), stamp=stamp, payload=content, unsent=bool(unsent))


def _in_steps(db: sqlite3.Connection, query: str, values: list[Any]) -> Iterator[Any]:
    after = -(2**63)
    while True:
        run = db.execute(f"{query} LIMIT ?", [after, *values, READ_RUN]).fetchall()
        yield from run
        if len(run) < READ_RUN:
            return
        after = run[-1][0]


def pages_used(db: sqlite3.Connection) -> int:
    """Return how many pages hold something."""
    pages = int(db.execute("PRAGMA page_count").fetchone()[0])
    return pages - int(db.execute("PRAGMA freelist_count").fetchone()[0])
