"""The journal and outbox: one SQLite file, one transaction for a record and the message that will carry it.

Durability, chosen knowingly: write-ahead log with ``synchronous = FULL`` for everything that ``append`` writes, so what
it has returned survives a power cut; a cut may lose at most the transaction being written. Taking delivered messages
out of the outbox is not synced by itself (``NORMAL``): a cut may bring some back, and they are sent again with the
same ``seq``. A SIGKILL loses nothing in either mode: the operating system holds the written pages.

``seq`` is given inside the transaction, rises by one, and never repeats: neither after pruning (the newest record
always stays) nor when a damaged or deleted file is replaced (a small file beside the journal, ``FILE.seq``, holds a
number that no record has passed; the new journal begins there).
"""

from __future__ import annotations

import contextlib
import copy
import dataclasses
import json
import shutil
import sqlite3
import threading
import time
from collections.abc import Callable, Mapping, Sequence
from pathlib import Path
from typing import Any, TypeVar

from edgewatch.errors import DeviceError
from edgewatch.record import rows as table
from edgewatch.record.aside import Aside
from edgewatch.record.ceiling import Ceiling
from edgewatch.record.outbox import Outbox
from edgewatch.record.rows import DamagedError, Entry, JournalStatus, Row
from edgewatch.record.salvage import salvage
from edgewatch.wire import messages
from edgewatch.wire.kinds import STATES
from edgewatch.wire.messages import Stamp
from edgewatch.wire.outgoing import Outgoing

__all__ = ["DamagedError", "Entry", "Journal", "JournalStatus", "Row"]

T = TypeVar("T")

PRUNE_RUN = 256
"""Records that give way in one step."""
RESERVE = 10_000
"""How far ahead ``FILE.seq`` is written; so many numbers at most are skipped when a damaged file is replaced."""
TAKE_OVER_S = 60.0
"""What could not be taken over from a damaged file is tried again this often (s): room may have been made."""
MOST_BOOTS = 1000
"""Each time so many more starts have been recorded, those of which no record is left are forgotten."""
SPARE_PAGES = 64
"""Pruning begins this many pages before the size limit: the write-ahead log and the indexes need room too."""


class Journal:
    """One journal file, used by any number of threads of one process.

    ``most_mb``: size at which the oldest delivered records give way (records whose message is still unsent never do);
    ``thin_windows_mb``: when the unsent window messages exceed this size, only every second one is sent, old and new
    alike; when they exceed it again, every fourth, and so on, so the whole outage is covered evenly. The others leave
    the outbox, their records stay. Once a quarter of the size is left, all are sent again. What gave way is counted,
    recorded and published as ``thinned``.

    A damaged file is set aside whole and a new one begun, with the unsent records and the states that can still be
    read; ``on_set_aside(path, reason)`` is told, from the thread that found it, and may call the journal. The newest
    ``keep_damaged`` of them stay, the others are deleted, which ``reason`` says.

    All methods raise ``DeviceError`` when the file cannot be used (locked, disk full, read-only): nothing of that call
    was then recorded, and the same call may be made again. The constructor does too unless ``patient``: then the file
    is opened by the first call that can (a station must judge and switch its relay on a full disk as well).
    """

    def __init__(
        self,
        path: Path,
        *,
        most_mb: float = 1024.0,
        thin_windows_mb: float = 64.0,
        keep_damaged: int = 3,
        on_set_aside: Callable[[Path, str], None] | None = None,
        patient: bool = False,
        utc: Callable[[], float] = time.time,
    ) -> None:
        self.path = path
        self._most_bytes = most_mb * 1e6
        self._aside = Aside(path, keep=keep_damaged)
        self._on_set_aside = on_set_aside
        self._utc = utc
        self._lock = threading.RLock()
        self._db: sqlite3.Connection | None = None
        self._ceiling: Ceiling | None = None
        self._closed = False
        self._inode = 0
        self._floor = 0
        self._prune_after = 0
        self._told: set[Path] = set()
        self._waiting: tuple[Path, ...] = ()
        self._take_over_s = 0.0
        self._outbox = Outbox(thin_windows_mb * 1e6)
        try:
            with self._lock:
                self._whole()
        except DeviceError:
            self._abandon()
            if not patient:
                raise
        except BaseException:
            self._abandon()
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
        self._used(lambda db: self._write(db, lambda: _keep(db, {key: value})))

    def delivered(self, seqs: Sequence[int]) -> None:
        """Take the messages ``seqs`` out of the outbox: the broker has them. Unknown numbers do no harm."""
        if seqs:
            self._used(lambda db: self._write(db, lambda: self._take(db, seqs), synced=False))

    def close(self) -> None:
        """Close the file; a second call does nothing."""
        with self._lock:
            self._closed = True
            self._drop()
            if self._ceiling is not None:
                self._ceiling.close()

    # ------------------------------------------------------------------ reading

    def pending(self, limit: int, *, after: int = 0) -> list[Outgoing]:
        """Return up to ``limit`` messages of the outbox in the order of ``seq``, those above ``after``."""
        return self._used(lambda db: table.pending(db, limit, after))

    def latest(self, kind: str) -> tuple[int, bytes] | None:
        """Return ``seq`` and payload of the newest record of a state kind (``kinds.STATES``), delivered or not."""
        return self._used(lambda db: table.latest(db, kind))

    def newest(self) -> int:
        """Return the highest ``seq`` recorded, 0 when there is none."""
        return self._used(lambda db: table.newest(db) or 0)

    def state(self, key: str, default: Any = None) -> Any:
        """Return the value kept under ``key``."""
        return self._used(lambda db: table.state(db, key, default))

    def rows(
        self,
        kind: str | None = None,
        *,
        since_utc_s: float | None = None,
        until_utc_s: float | None = None,
        last: int | None = None,
    ) -> list[Row]:
        """Return records in the order of ``seq``: of one kind, of a time span, the ``last`` ones only."""
        return self._used(lambda db: list(table.read_rows(db, kind, since_utc_s, until_utc_s, last)))

    def status(self) -> JournalStatus:
        """Size and backlog now."""
        return self._used(self._status)

    # ------------------------------------------------------------------ opening, failing, setting aside

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
        except table.FAILURES as error:
            self._roll_back(db)
            raise table.translated(error, self.path) from error
        except BaseException:
            self._roll_back(db)
            raise

    def _roll_back(self, db: sqlite3.Connection) -> None:
        try:
            if db.in_transaction:
                db.execute("ROLLBACK")
            self._prune_after = 0
            self._outbox.count(db)
        except (*table.FAILURES, DamagedError):
            self._drop()  # opened anew by the next call

    def _whole(self) -> sqlite3.Connection:
        """Return the open connection; open, check, or begin the file where needed."""
        if self._closed:
            raise DeviceError(f"journal {self.path}: is closed")
        if self._db is not None:
            with contextlib.suppress(OSError):
                if self.path.stat().st_ino == self._inode:
                    if self._waiting and time.monotonic() >= self._take_over_s:
                        self._take_over("found waiting")
                    return self._db or self._opened()
            self._drop()  # the file was deleted or replaced under us
        try:
            self._opened()
            self._take_over("found at the start")
            return self._db or self._opened()
        except DamagedError as error:
            self._set_aside(str(error))
            try:
                return self._opened()
            except DamagedError as again:
                raise DeviceError(f"journal {self.path}: a new file is damaged too: {again}") from again

    def _held(self) -> Ceiling:
        """Return the number file, whose lock keeps a second station away."""
        if self._ceiling is None:
            try:
                self.path.parent.mkdir(parents=True, exist_ok=True)
            except OSError as error:
                raise DeviceError(
                    f"journal {self.path}: its folder cannot be made: {error.strerror or error}"
                ) from error
            self._ceiling = Ceiling(Path(f"{self.path}.seq"))
        return self._ceiling

    def _opened(self) -> sqlite3.Connection:
        ceiling = self._held()
        try:
            if self.path.exists() and not table.is_sqlite(self.path):
                raise DamagedError("it does not begin as a SQLite file")
            self._db = db = sqlite3.connect(
                self.path, timeout=table.BUSY_S, isolation_level=None, check_same_thread=False
            )
            table.check_ours(db, self.path)
            db.execute(f"PRAGMA page_size = {table.PAGE_BYTES}")  # of a new file; another's stays as it is
            db.execute("PRAGMA journal_mode = WAL")
            db.execute("PRAGMA journal_size_limit = 8000000")
            if not db.execute("SELECT count(*) FROM sqlite_master").fetchone()[0]:
                self._write(db, lambda: self._begin(db, ceiling.top))
            elif self.path.stat().st_size <= table.CHECK_WHOLE_BYTES:
                table.check_whole(db)
            self._inode = self.path.stat().st_ino
            self._prune_after = 0
            self._outbox.count(db)
            self._floor = _floor(db)
            newest = max(table.newest(db) or 0, self._floor)
            if newest > ceiling.top:
                ceiling.raise_to(newest + RESERVE)
        except table.FAILURES as error:
            self._drop()
            raise table.translated(error, self.path) from error
        except OSError as error:
            self._drop()
            raise DeviceError(f"journal {self.path}: {error.strerror or error}") from error
        except (DeviceError, DamagedError):
            self._drop()
            raise
        return db

    def _begin(self, db: sqlite3.Connection, floor: int) -> None:
        """Begin a new file; ``floor``: no number up to it may be given again."""
        table.begin_file(db)
        _keep(db, {"floor": floor})

    def _drop(self) -> None:
        db, self._db = self._db, None
        if db is not None:
            with contextlib.suppress(sqlite3.Error):
                db.close()

    def _abandon(self) -> None:
        """Leave nothing behind where no journal came about."""
        self._drop()
        ceiling, self._ceiling = self._ceiling, None
        if ceiling is not None:
            ceiling.abandon()

    def _set_aside(self, reason: str) -> None:
        """Rename the damaged file with its log, whole; begin a new one above every ``seq`` used, with what is left."""
        self._drop()
        ceiling = self._held()
        known = ceiling.top > 0
        if not known and not table.has_our_header(self.path):
            raise DeviceError(f"journal {self.path}: is not a journal ({reason}); name another file, or move it away")
        if not known:  # its number file is gone as well: seconds since 1970 exceed any count of records
            ceiling.raise_to(max(int(self._utc()), RESERVE))
        try:
            self._aside.take(self._utc())
        except OSError as error:
            raise DeviceError(
                f"journal {self.path}: is damaged ({reason}) and cannot be set aside: {error.strerror or error}"
            ) from error
        # A new file that cannot be written now is begun empty by the next call that can, and then takes over.
        with contextlib.suppress(DeviceError, DamagedError):
            self._opened()
        self._take_over(reason)

    def _take_over(self, reason: str) -> None:
        """Take over what is whole from the files set aside where that was not done yet, and tell of each: also, once,
        of one that goes on waiting, because undelivered records lie in it.
        """
        for aside in self._aside.waiting():
            kept, saved = aside, "nothing could be taken over: there is no new file"
            db = self._db
            if db is not None:
                try:
                    records, states = self._write(db, lambda aside=aside, db=db: salvage(aside, db))  # type: ignore[misc]
                    self._outbox.count(db)
                    kept = self._aside.done(aside)
                    saved = f"taken over: {records} unsent records, {states} kept values"
                except (*table.FAILURES, DamagedError, OSError) as error:
                    saved = f"nothing could be taken over: {error}"
                    self._roll_back(db)
            if kept == aside and aside in self._told:
                continue
            self._told.add(aside)
            deleted = self._aside.clear(kept)
            if self._on_set_aside is not None:
                self._on_set_aside(kept, "; ".join([reason, saved, *deleted]))
        self._waiting = tuple(self._aside.waiting())
        self._take_over_s = time.monotonic() + TAKE_OVER_S

    # ------------------------------------------------------------------ transactions

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
        def job() -> tuple[int, ...]:
            before = copy.copy(self._outbox.thinning)
            first = max(table.newest(db) or 0, self._floor) + 1
            seqs = tuple(range(first, first + len(entries)))
            for seq, entry in zip(seqs, entries, strict=True):
                self._insert(db, seq, entry, stamp)
            _keep(db, state)
            last = first + len(entries) - 1
            if entries:
                gave_way = self._outbox.thin(db)
                if gave_way is not None:
                    self._prune_after = min(self._prune_after, gave_way - 1)
                report = self._outbox.report()
                if report is not None:
                    last += 1
                    self._insert(db, last, report, stamp)
                self._prune(db)
            if self._outbox.thinning != before:
                _keep(db, {"thinning": dataclasses.asdict(self._outbox.thinning)})
            ceiling = self._held()
            if last > ceiling.top:
                ceiling.raise_to(last + RESERVE)
            return seqs

        return self._write(db, job)

    def _insert(self, db: sqlite3.Connection, seq: int, entry: Entry, stamp: Stamp) -> None:
        payload = messages.encode(messages.finish(entry.kind, entry.body, stamp, seq=seq))
        check = table.checksum(seq, payload)
        db.execute(
            "INSERT INTO record VALUES (?, ?, ?, ?, ?, ?, ?, ?)",
            (seq, entry.kind, _boot(db, stamp.boot), stamp.monotonic_s, stamp.utc_s, stamp.synced, check, payload),
        )
        if entry.kind in STATES:
            db.execute("INSERT OR REPLACE INTO latest VALUES (?, ?, ?, ?)", (entry.kind, seq, check, payload))
        self._outbox.put(db, seq, entry, len(payload))

    def _take(self, db: sqlite3.Connection, seqs: Sequence[int]) -> None:
        self._outbox.take(db, seqs)
        self._prune_after = min(self._prune_after, min(seqs) - 1)

    def _prune(self, db: sqlite3.Connection) -> None:
        """Let the oldest delivered records give way when the file has come near its size limit."""
        size = int(db.execute("PRAGMA page_size").fetchone()[0])
        if table.pages_used(db) * size <= self._most_bytes - SPARE_PAGES * size:
            return
        run = db.execute(
            "SELECT record.seq, outbox.seq IS NULL FROM record LEFT JOIN outbox USING (seq)"
            " WHERE record.seq > ? AND record.seq < (SELECT max(seq) FROM record) ORDER BY record.seq LIMIT ?",
            (self._prune_after, PRUNE_RUN),
        ).fetchall()
        if not run:
            return
        if any(sent for _, sent in run):
            span = (run[0][0], run[-1][0])
            # What stays is written anew: a page that lost its windows and kept one bar would never be filled again.
            kept = db.execute(
                "SELECT record.* FROM record JOIN outbox USING (seq) WHERE record.seq BETWEEN ? AND ? ORDER BY seq",
                span,
            ).fetchall()
            db.execute("DELETE FROM record WHERE seq BETWEEN ? AND ?", span)
            db.executemany("INSERT INTO record VALUES (?, ?, ?, ?, ?, ?, ?, ?)", kept)
        self._prune_after = run[-1][0]

    def _status(self, db: sqlite3.Connection) -> JournalStatus:
        page_bytes = int(db.execute("PRAGMA page_size").fetchone()[0])
        room = self._most_bytes
        with contextlib.suppress(OSError):
            room = min(room, self.path.stat().st_size + shutil.disk_usage(self.path.parent).free)
        return JournalStatus(
            unsent=self._outbox.unsent,
            unsent_bytes=self._outbox.unsent_bytes,
            windows_thinned=self._outbox.thinning.total,
            used_bytes=table.pages_used(db) * page_bytes,
            next_seq=max(table.newest(db) or 0, self._floor) + 1,
            unsent_room_bytes=self._outbox.unsent_room,
            room_bytes=int(room),
            aside=len(self._waiting),
            aside_bytes=sum(self._aside.size(path) for path in self._waiting),
        )


def _floor(db: sqlite3.Connection) -> int:
    floor = table.state(db, "floor", 0)
    if not isinstance(floor, int) or not 0 <= floor < 2**62:
        raise DamagedError("the lowest number is none")
    return floor


def _boot(db: sqlite3.Connection, name: str) -> int:
    row = db.execute("SELECT id FROM boot WHERE name = ?", (name,)).fetchone()
    if row is not None:
        return int(row[0])
    number = int(db.execute("INSERT INTO boot(name) VALUES (?)", (name,)).lastrowid or 0)
    if db.execute("SELECT count(*) FROM boot").fetchone()[0] > MOST_BOOTS and number % MOST_BOOTS == 0:
        db.execute("DELETE FROM boot WHERE id != ? AND id NOT IN (SELECT DISTINCT boot FROM record)", (number,))
    return number


def _keep(db: sqlite3.Connection, state: Mapping[str, Any]) -> None:
    for key, value in state.items():
        if value is None:
            db.execute("DELETE FROM state WHERE key = ?", (key,))
        else:
            text = json.dumps(messages.plain(value), ensure_ascii=True, allow_nan=False)
            db.execute("INSERT OR REPLACE INTO state VALUES (?, ?)", (key, text))
