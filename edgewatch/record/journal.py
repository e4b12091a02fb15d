"""The journal and outbox: one SQLite file, one transaction for a record and the message that will carry it.

Durability, chosen knowingly: write-ahead log with ``synchronous = FULL`` for everything that ``append`` writes, so what
it has returned survives a power cut; a cut may lose at most the transaction being written. Taking delivered messages
out of the outbox is not synced by itself (``NORMAL``): a cut may bring some back, and they are sent again with the
same ``seq``. A SIGKILL loses nothing in either mode: the operating system holds the written pages.

``seq`` is given inside the transaction, rises by one, and never repeats: neither after pruning (the newest record
always stays) nor when a damaged or deleted file is replaced (a small file beside the journal, ``FILE.seq``, holds a
number that no record has reached; the new journal begins there).
"""

from __future__ import annotations

import contextlib
import copy
import dataclasses
import json
import sqlite3
import threading
import time
import zlib
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, TypeVar

from edgewatch.errors import DeviceError
from edgewatch.record.ceiling import Ceiling
from edgewatch.wire import messages
from edgewatch.wire.kinds import KINDS, STATES
from edgewatch.wire.messages import Stamp
from edgewatch.wire.outgoing import Outgoing

T = TypeVar("T")

APPLICATION_ID = 0x65647761
"""``edwa``: marks the file as ours in SQLite's header, so that another program's database is never written to."""
SCHEMA_VERSION = 1
BUSY_S = 1.0
"""Longest wait for another process that holds the file locked."""
CHECK_WHOLE_BYTES = 64_000_000
"""Up to this size the whole file is checked when opened (0.1 s on a desk computer, about 3 s from an SD card); a larger
one is checked as it is read: each record carries its own check sum."""
THIN_RUN = 2000
"""Windows looked at in one thinning step, so that a transaction stays short."""
THIN_REPORT = 1000
"""So many windows that gave way, at least, make one ``thinned`` record (and what is left makes the last one)."""
MOST_STRIDE = 2**20
"""At four windows a second, one in three days."""
PRUNE_RUN = 256
"""Records that give way in one step."""
RESERVE = 10_000
"""How far ahead ``FILE.seq`` is written; so many numbers at most are skipped when a damaged file is replaced."""
PAGE_BYTES = 2048
"""A transaction writes whole pages: a quarter less on the card than with 4096, as measured (1024: a third less, but
then most bars spill over several pages)."""
SPARE_PAGES = 64
"""Pruning begins this many pages before the size limit: the write-ahead log and the indexes need room too."""

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
    way since the journal began; ``used_bytes``: pages in use; ``next_seq``: what the next record will get.
    """

    unsent: int
    unsent_bytes: int
    windows_thinned: int
    used_bytes: int
    next_seq: int


@dataclass(slots=True, kw_only=True)
class _Thinning:
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


class DamagedError(Exception):
    """The file can be opened and read, and what it holds is not right."""


_WORLD = ("locked", "busy", "full", "I/O", "unable to open", "readonly", "interrupted", "out of memory", "denied")
"""Words in SQLite's texts of errors that lie outside the file. Python 3.10 does not give the error's code."""


def translated(error: sqlite3.Error, path: Path) -> Exception:
    """Return what a SQLite error means: ``DeviceError`` for the world's failures, ``DamagedError`` for the file's."""
    text = str(error)
    outside = isinstance(error, sqlite3.OperationalError) and any(word in text for word in _WORLD)
    if outside or isinstance(error, (sqlite3.ProgrammingError, sqlite3.InterfaceError)):
        remedy = "free some space" if "full" in text else "see that it is there, writable and not in use"
        return DeviceError(f"journal {path}: {text}; {remedy}")
    return DamagedError(text)


def checksum(seq: int, payload: bytes) -> int:
    """CRC-32 of a record: its number and its payload, so that neither an altered nor a misplaced one passes."""
    return zlib.crc32(payload, zlib.crc32(seq.to_bytes(8, "big", signed=True)))


class Journal:
    """One journal file, used by any number of threads of one process.

    ``most_mb``: size at which the oldest delivered records give way (records whose message is still unsent never do);
    ``thin_windows_mb``: when the unsent window messages exceed this size, only every second one is sent, old and new
    alike; when they exceed it again, every fourth, and so on, so the whole outage is covered evenly. The others leave
    the outbox, their records stay. Once a quarter of the size is left, all are sent again. What gave way is counted,
    recorded and published as ``thinned``. ``on_set_aside(path, reason)`` is told of a damaged file that was set aside
    whole, from the thread that found it.

    All methods raise ``DeviceError`` when the file cannot be used (locked, disk full, read-only): nothing of that call
    was then recorded, and the same call may be made again.
    """

    def __init__(
        self,
        path: Path,
        *,
        most_mb: float = 512.0,
        thin_windows_mb: float = 128.0,
        on_set_aside: Callable[[Path, str], None] | None = None,
        utc: Callable[[], float] = time.time,
    ) -> None:
        self.path = path
        self._most_bytes = most_mb * 1e6
        self._thin_bytes = thin_windows_mb * 1e6
        self._on_set_aside = on_set_aside
        self._utc = utc
        self._lock = threading.RLock()
        self._db: sqlite3.Connection | None = None
        self._closed = False
        self._inode = 0
        self._prune_after = 0
        self._unsent = self._unsent_bytes = self._window_bytes = 0
        self._place = 0
        self._thinning = _Thinning()
        try:
            path.parent.mkdir(parents=True, exist_ok=True)
        except OSError as error:
            raise DeviceError(f"journal {path}: its folder cannot be made: {error.strerror or error}") from error
        self._ceiling = Ceiling(Path(f"{path}.seq"))
        try:
            with self._lock:
                self._whole()
        except BaseException:
            self._ceiling.abandon()
            raise

    # ------------------------------------------------------------------ writing

    def append(
        self, entries: Sequence[Entry], *, stamp: Stamp, state: Mapping[str, Any] | None = None
    ) -> tuple[int, ...]:
        """Record ``entries`` with their outgoing messages, and set ``state`` keys, in one durable transaction.

        Returns the ``seq`` of each entry, in order. ``state`` values are JSON values; ``None`` removes a key.
        """
        return self._used(lambda db: self._append(db, entries, stamp, state or {}))

    def set_state(self, key: str, value: Any) -> None:
        """Keep ``value`` (a JSON value; ``None`` removes it) under ``key``, durably."""
        self._used(lambda db: self._write(db, lambda: self._keep(db, {key: value})))

    def delivered(self, seqs: Sequence[int]) -> None:
        """Take the messages ``seqs`` out of the outbox: the broker has them. Unknown numbers do no harm."""
        if seqs:
            self._used(lambda db: self._deliver(db, seqs))

    def close(self) -> None:
        """Close the file; a second call does nothing."""
        with self._lock:
            self._closed = True
            self._drop()
            self._ceiling.close()

    # ------------------------------------------------------------------ reading

    def pending(self, limit: int, *, after: int = 0) -> list[Outgoing]:
        """Return up to ``limit`` messages of the outbox in the order of ``seq``, those above ``after``."""
        return self._used(lambda db: _pending(db, limit, after))

    def latest(self, kind: str) -> tuple[int, bytes] | None:
        """Return ``seq`` and payload of the newest record of a state kind (``kinds.STATES``), delivered or not."""
        return self._used(lambda db: _latest(db, kind))

    def newest(self) -> int:
        """Return the highest ``seq`` recorded, 0 when there is none."""
        return self._used(lambda db: _newest(db) or 0)

    def state(self, key: str, default: Any = None) -> Any:
        """Return the value kept under ``key``."""
        return self._used(lambda db: _state(db, key, default))

    def rows(
        self,
        kind: str | None = None,
        *,
        since_utc_s: float | None = None,
        until_utc_s: float | None = None,
        last: int | None = None,
    ) -> list[Row]:
        """Return records in the order of ``seq``: of one kind, of a time span, the ``last`` ones only."""
        return self._used(lambda db: list(read_rows(db, kind, since_utc_s, until_utc_s, last)))

    def status(self) -> JournalStatus:
        """Size and backlog now."""
        return self._used(self._status)

    # ------------------------------------------------------------------ inside

    def _used(self, job: Callable[[sqlite3.Connection], T]) -> T:
        """Run ``job`` on the open file; a file found damaged is set aside and the job run once more on the new one."""
        with self._lock:
            try:
                return self._tried(job)
            except DamagedError as error:
                self._set_aside(str(error))
                try:
                    return self._tried(job)
                except DamagedError as again:
                    raise DeviceError(f"journal {self.path}: a new file is damaged too: {again}") from again

    def _tried(self, job: Callable[[sqlite3.Connection], T]) -> T:
        db = self._whole()
        try:
            return job(db)
        except sqlite3.Error as error:
            self._roll_back(db)
            raise translated(error, self.path) from error
        except BaseException:
            self._roll_back(db)
            raise

    def _roll_back(self, db: sqlite3.Connection) -> None:
        try:
            if db.in_transaction:
                db.execute("ROLLBACK")
            self._count(db)
        except (sqlite3.Error, DamagedError):
            self._drop()  # opened anew by the next call

    def _whole(self) -> sqlite3.Connection:
        """Return the open connection; open, check, or begin the file where needed."""
        if self._closed:
            raise DeviceError(f"journal {self.path}: is closed")
        if self._db is not None:
            with contextlib.suppress(OSError):
                if self.path.stat().st_ino == self._inode:
                    return self._db
            self._drop()  # the file was deleted or replaced under us
        try:
            return self._opened()
        except DamagedError as error:
            self._set_aside(str(error))
            try:
                return self._opened()
            except DamagedError as again:
                raise DeviceError(f"journal {self.path}: a new file is damaged too: {again}") from again

    def _opened(self) -> sqlite3.Connection:
        try:
            if self.path.exists() and not _is_sqlite(self.path):
                raise DamagedError("it does not begin as a SQLite file")
            self._db = db = sqlite3.connect(self.path, timeout=BUSY_S, isolation_level=None, check_same_thread=False)
            check_ours(db, self.path)
            db.execute(f"PRAGMA page_size = {PAGE_BYTES}")  # of a new file; another's stays as it is
            db.execute("PRAGMA journal_mode = WAL")
            db.execute("PRAGMA journal_size_limit = 8000000")
            if not db.execute("SELECT count(*) FROM sqlite_master").fetchone()[0]:
                self._write(db, lambda: _begin_file(db))
            elif self.path.stat().st_size <= CHECK_WHOLE_BYTES:
                check_whole(db)
            self._inode = self.path.stat().st_ino
            self._prune_after = 0
            self._count(db)
            newest = _newest(db)
            if newest is not None and newest > self._ceiling.top:
                self._ceiling.raise_to(newest + RESERVE)
        except sqlite3.Error as error:
            self._drop()
            raise translated(error, self.path) from error
        except OSError as error:
            self._drop()
            raise DeviceError(f"journal {self.path}: {error.strerror or error}") from error
        except (DeviceError, DamagedError):
            self._drop()
            raise
        return db

    def _drop(self) -> None:
        db, self._db = self._db, None
        if db is not None:
            with contextlib.suppress(sqlite3.Error):
                db.close()

    def _set_aside(self, reason: str) -> None:
        """Rename the damaged file with its log, whole; the next journal begins above every ``seq`` used."""
        self._drop()
        known = self._ceiling.top > 0
        if not known and not _has_our_header(self.path):
            raise DeviceError(f"journal {self.path}: is not a journal ({reason}); name another file, or move it away")
        if not known:  # its number file is gone as well: seconds since 1970 exceed any count of records
            self._ceiling.raise_to(max(int(self._utc()), RESERVE))
        stamp = time.strftime("%Y%m%dT%H%M%SZ", time.gmtime(self._utc()))
        aside = Path(f"{self.path}.damaged-{stamp}")
        tries = 1
        while aside.exists():
            tries += 1
            aside = Path(f"{self.path}.damaged-{stamp}-{tries}")
        try:
            for ending in ("-wal", "-shm", ""):  # the file last: until it is renamed, the next start tries again
                with contextlib.suppress(FileNotFoundError):
                    Path(f"{self.path}{ending}").replace(f"{aside}{ending}")
        except OSError as error:
            raise DeviceError(
                f"journal {self.path}: is damaged ({reason}) and cannot be set aside: {error.strerror or error}"
            ) from error
        if self._on_set_aside is not None:
            self._on_set_aside(aside, reason)

    def _write(self, db: sqlite3.Connection, job: Callable[[], T], *, synced: bool = True) -> T:
        """Run ``job`` in one transaction, durable if ``synced``; the caller rolls back when it raises."""
        db.execute(f"PRAGMA synchronous = {'FULL' if synced else 'NORMAL'}")
        db.execute("BEGIN IMMEDIATE")
        result = job()
        db.execute("COMMIT")
        return result

    def _append(
        self, db: sqlite3.Connection, entries: Sequence[Entry], stamp: Stamp, state: Mapping[str, Any]
    ) -> tuple[int, ...]:
        before = copy.copy(self._thinning)

        def job() -> tuple[int, ...]:
            newest = _newest(db)
            first = (self._ceiling.top if newest is None else newest) + 1
            seqs = tuple(range(first, first + len(entries)))
            for seq, entry in zip(seqs, entries, strict=True):
                self._insert(db, seq, entry, stamp)
            self._keep(db, state)
            last = first + len(entries) - 1
            if entries:
                self._thin(db)
                last += self._report_thinned(db, last + 1, stamp)
                self._prune(db)
            if self._thinning != before:
                self._keep(db, {"thinning": dataclasses.asdict(self._thinning)})
            if last > self._ceiling.top:
                self._ceiling.raise_to(last + RESERVE)
            return seqs

        return self._write(db, job)

    def _insert(self, db: sqlite3.Connection, seq: int, entry: Entry, stamp: Stamp) -> None:
        payload = messages.encode(messages.finish(entry.kind, entry.body, stamp, seq=seq))
        check = checksum(seq, payload)
        db.execute(
            "INSERT INTO record VALUES (?, ?, ?, ?, ?, ?, ?, ?)",
            (seq, entry.kind, self._boot(db, stamp.boot), stamp.monotonic_s, stamp.utc_s, stamp.synced, check, payload),
        )
        if entry.kind == "window":
            self._place += 1
            if self._place % self._thinning.stride:
                self._thinning.gave_way(seq)
                return
            self._window_bytes += len(payload)
        place = self._place if entry.kind == "window" else 0
        db.execute("INSERT INTO outbox VALUES (?, ?, ?, ?)", (seq, entry.kind, len(payload), place))
        if entry.reply_topic:
            db.execute("INSERT INTO route VALUES (?, ?, ?)", (seq, entry.reply_topic, entry.correlation))
        if entry.kind in STATES:
            db.execute("INSERT OR REPLACE INTO latest VALUES (?, ?, ?, ?)", (entry.kind, seq, check, payload))
        self._unsent += 1
        self._unsent_bytes += len(payload)

    def _boot(self, db: sqlite3.Connection, name: str) -> int:
        row = db.execute("SELECT id FROM boot WHERE name = ?", (name,)).fetchone()
        if row is not None:
            return int(row[0])
        return int(db.execute("INSERT INTO boot(name) VALUES (?)", (name,)).lastrowid or 0)

    def _keep(self, db: sqlite3.Connection, state: Mapping[str, Any]) -> None:
        for key, value in state.items():
            if value is None:
                db.execute("DELETE FROM state WHERE key = ?", (key,))
            else:
                text = json.dumps(messages.plain(value), ensure_ascii=True, allow_nan=False)
                db.execute("INSERT OR REPLACE INTO state VALUES (?, ?)", (key, text))

    def _thin(self, db: sqlite3.Connection) -> None:
        """Widen or end the thinning where it is time, and take one run of the sweep over older windows."""
        now = self._thinning
        if now.stride > 1 and self._window_bytes < self._thin_bytes / 4:
            now.stride, now.swept_to = 1, None
        elif now.swept_to is None and self._window_bytes > self._thin_bytes and now.stride < MOST_STRIDE:
            now.stride, now.swept_to = now.stride * 2, 0
        if now.swept_to is None:
            return
        run = db.execute(
            "SELECT seq, bytes, place FROM outbox WHERE kind = 'window' AND seq > ? ORDER BY seq LIMIT ?",
            (now.swept_to, THIN_RUN),
        ).fetchall()
        now.swept_to = run[-1][0] if len(run) == THIN_RUN else None  # the end: newer ones were thinned as they came
        gone = [(seq, size) for seq, size, place in run if place % now.stride]
        db.executemany("DELETE FROM outbox WHERE seq = ?", ((seq,) for seq, _ in gone))
        for seq, size in gone:
            now.gave_way(seq)
            self._unsent -= 1
            self._unsent_bytes -= size
            self._window_bytes -= size

    def _report_thinned(self, db: sqlite3.Connection, seq: int, stamp: Stamp) -> int:
        """Record under ``seq`` what gave way since the last such record, and return how many records that made."""
        now = self._thinning
        if not now.count or (now.count < THIN_REPORT and now.stride > 1):
            return 0
        body = messages.thinned(
            count=now.count, first_seq=now.first, last_seq=now.last, keep_every=now.stride, total=now.total
        )
        now.count = now.first = now.last = 0
        self._insert(db, seq, Entry(kind="thinned", body=body), stamp)
        return 1

    def _prune(self, db: sqlite3.Connection) -> None:
        """Let the oldest delivered records give way when the file has come near its size limit."""
        size = int(db.execute("PRAGMA page_size").fetchone()[0])
        if self._pages_used(db) * size <= self._most_bytes - SPARE_PAGES * size:
            return
        rows = db.execute(
            "SELECT record.seq, outbox.seq IS NULL FROM record LEFT JOIN outbox USING (seq)"
            " WHERE record.seq > ? AND record.seq < (SELECT max(seq) FROM record) ORDER BY record.seq LIMIT ?",
            (self._prune_after, PRUNE_RUN),
        ).fetchall()
        db.executemany("DELETE FROM record WHERE seq = ?", ((seq,) for seq, sent in rows if sent))
        # Unsent records stay: go on behind them, and from the beginning again when the end is reached.
        self._prune_after = rows[-1][0] if len(rows) == PRUNE_RUN else 0

    def _deliver(self, db: sqlite3.Connection, seqs: Sequence[int]) -> None:
        def job() -> None:
            for seq in seqs:
                row = db.execute("SELECT kind, bytes FROM outbox WHERE seq = ?", (seq,)).fetchone()
                if row is None:
                    continue
                db.execute("DELETE FROM outbox WHERE seq = ?", (seq,))
                db.execute("DELETE FROM route WHERE seq = ?", (seq,))
                self._unsent -= 1
                self._unsent_bytes -= row[1]
                if row[0] == "window":
                    self._window_bytes -= row[1]

        self._write(db, job, synced=False)
        self._prune_after = 0

    def _pages_used(self, db: sqlite3.Connection) -> int:
        pages = int(db.execute("PRAGMA page_count").fetchone()[0])
        return pages - int(db.execute("PRAGMA freelist_count").fetchone()[0])

    def _count(self, db: sqlite3.Connection) -> None:
        """Count the outbox anew (after opening and after a transaction that failed)."""
        try:
            row = db.execute(
                "SELECT count(*), coalesce(sum(bytes), 0), coalesce(max(place), 0),"
                " coalesce(sum(CASE kind WHEN 'window' THEN bytes ELSE 0 END), 0) FROM outbox"
            ).fetchone()
            self._unsent, self._unsent_bytes, self._place, self._window_bytes = (int(part) for part in row)
            self._thinning = _Thinning(**_state(db, "thinning", {}))
        except (TypeError, ValueError) as error:
            raise DamagedError(f"the outbox cannot be counted: {error}") from error

    def _status(self, db: sqlite3.Connection) -> JournalStatus:
        newest = _newest(db)
        return JournalStatus(
            unsent=self._unsent,
            unsent_bytes=self._unsent_bytes,
            windows_thinned=self._thinning.total,
            used_bytes=self._pages_used(db) * int(db.execute("PRAGMA page_size").fetchone()[0]),
            next_seq=(self._ceiling.top if newest is None else newest) + 1,
        )


# ---------------------------------------------------------------------- reading and checking one open file


def _begin_file(db: sqlite3.Connection) -> None:
    for statement in _TABLES.split(";"):
        db.execute(statement)
    db.execute(f"PRAGMA application_id = {APPLICATION_ID}")
    db.execute(f"PRAGMA user_version = {SCHEMA_VERSION}")


def _head(path: Path) -> bytes:
    with path.open("rb") as file:
        return file.read(100)


def _is_sqlite(path: Path) -> bool:
    """Whether the file is empty or begins as section 1.3 of SQLite's file format has it.

    SQLite itself takes a file shorter than its header for an empty one and would write over it, and opens one with
    unknown format versions (bytes 18, 19) for reading only.
    """
    head = _head(path)
    return not head or (head.startswith(b"SQLite format 3\0") and head[18:20] in (b"\1\1", b"\2\2"))


def _has_our_header(path: Path) -> bool:
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


def _newest(db: sqlite3.Connection) -> int | None:
    value = db.execute("SELECT max(seq) FROM record").fetchone()[0]
    return None if value is None else int(value)


def _checked(seq: int, check: Any, payload: Any) -> bytes:
    if not isinstance(payload, bytes) or checksum(seq, payload) != check:
        raise DamagedError(f"record {seq} does not match its check sum")
    return payload


def _pending(db: sqlite3.Connection, limit: int, after: int) -> list[Outgoing]:
    found = []
    for seq, kind, check, payload, topic, correlation in db.execute(
        "SELECT outbox.seq, record.kind, record.crc, record.payload, route.topic, route.correlation FROM outbox"
        " LEFT JOIN record USING (seq) LEFT JOIN route USING (seq) WHERE outbox.seq > ? ORDER BY outbox.seq LIMIT ?",
        (after, limit),
    ):
        whole = _checked(seq, check, payload)
        if kind not in KINDS:
            raise DamagedError(f"record {seq} is of an unknown kind")
        found.append(
            Outgoing(seq=seq, kind=kind, payload=whole, reply_topic=topic or "", correlation=correlation or b"")
        )
    return found


def _latest(db: sqlite3.Connection, kind: str) -> tuple[int, bytes] | None:
    row = db.execute("SELECT seq, crc, payload FROM latest WHERE kind = ?", (kind,)).fetchone()
    return None if row is None else (int(row[0]), _checked(row[0], row[1], row[2]))


def _state(db: sqlite3.Connection, key: str, default: Any) -> Any:
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
    """Yield records in the order of ``seq``. Raises ``sqlite3.Error`` and ``DamagedError``."""
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
        cursor: Iterator[Any] = db.execute(query, values)
    else:
        cursor = reversed(db.execute(f"{query} DESC LIMIT ?", [*values, last]).fetchall())
    for seq, name, boot, monotonic_s, utc_s, synced, check, payload, unsent in cursor:
        try:
            stamp = Stamp(boot=str(boot), monotonic_s=float(monotonic_s), utc_s=float(utc_s), synced=bool(synced))
            content = json.loads(_checked(seq, check, payload))
        except (TypeError, ValueError, RecursionError) as error:
            raise DamagedError(f"record {seq} cannot be read: {error}") from error
        yield Row(seq=seq, kind=str(name), stamp=stamp, payload=content, unsent=bool(unsent))
