"""Read a journal that a running station may hold, and note what the laboratory found. Never sets a file aside."""

from __future__ import annotations

import contextlib
import sqlite3
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from edgewatch.errors import DeviceError
from edgewatch.record import rows as table
from edgewatch.record.rows import DamagedError, Row


@dataclass(frozen=True, slots=True, kw_only=True)
class Finding:
    """What chemical analysis found of a bar: its grade, who says so, and when it was noted (s since 1970 UTC)."""

    bar: int
    grade: str
    who: str
    utc_s: float


@contextlib.contextmanager
def open_journal(path: Path, *, write: bool = False) -> Iterator[sqlite3.Connection]:
    """Open an existing journal beside whoever else uses it, and check that it is one.

    Raises ``DeviceError``, also for whatever goes wrong while it is used: missing, foreign, damaged, locked.
    """
    if not path.is_file():
        raise DeviceError(f"journal {path}: is not there")
    db: sqlite3.Connection | None = None
    try:
        db = _connect(path, "rw" if write else "ro")
        table.check_ours(db, path)
        yield db
    except table.FAILURES as error:
        found = table.translated(error, path)
        raise _readable(found, path) from error
    except DamagedError as error:
        raise _readable(error, path) from error
    finally:
        if db is not None:
            db.close()


def _connect(path: Path, mode: str) -> sqlite3.Connection:
    where = path.absolute().as_uri()
    db = sqlite3.connect(f"{where}?mode={mode}", uri=True, timeout=table.BUSY_S, isolation_level=None)
    try:
        db.execute("SELECT count(*) FROM sqlite_master").fetchone()
    except sqlite3.OperationalError:
        db.close()
        if mode != "ro" or Path(f"{path}-wal").exists():
            raise
        # A read-only medium has no room for the shared index of a write-ahead log; without a log none is needed.
        db = sqlite3.connect(f"{where}?immutable=1", uri=True, isolation_level=None)
    return db


def _readable(error: Exception, path: Path) -> DeviceError:
    if isinstance(error, DeviceError):
        return error
    return DeviceError(f"journal {path}: is damaged or is no journal: {error}")


def read_records(
    path: Path,
    kinds: tuple[str, ...],
    *,
    since_utc_s: float | None = None,
    until_utc_s: float | None = None,
    last: int | None = None,
) -> Iterator[Row]:
    """Yield records of ``kinds`` in the order of ``seq``. Raises ``DeviceError``."""
    with open_journal(path) as db:
        if last is None and len(kinds) == 1:
            yield from table.read_rows(db, kinds[0], since_utc_s, until_utc_s)
            return
        rows = [row for kind in kinds for row in table.read_rows(db, kind, since_utc_s, until_utc_s, last)]
        rows.sort(key=lambda row: row.seq)
        yield from rows if last is None else rows[-last:] if last else []


def read_findings(path: Path) -> dict[int, Finding]:
    """Return the newest finding of each bar. Raises ``DeviceError``."""
    with open_journal(path) as db:
        rows = db.execute("SELECT bar, grade, who, utc_s FROM finding ORDER BY rowid").fetchall()
        try:
            found = [Finding(bar=int(b), grade=str(g), who=str(w), utc_s=float(t)) for b, g, w, t in rows]
        except (TypeError, ValueError) as error:
            raise DeviceError(f"journal {path}: is damaged: a finding cannot be read: {error}") from error
    return {one.bar: one for one in found}


def confirm(path: Path, finding: Finding) -> Mapping[str, Any]:
    """Note what the laboratory found and return the record of that bar, the newest where numbers began anew.

    Works beside a running station. Raises ``DeviceError``; ``LookupError`` when the journal holds no such bar.
    """
    with open_journal(path, write=True) as db:
        bar = _newest_bar(db, finding.bar)
        if bar is None:
            raise LookupError(f"bar {finding.bar} is not in the journal {path}")
        db.execute("INSERT INTO finding VALUES (?, ?, ?, ?)", (finding.bar, finding.grade, finding.who, finding.utc_s))
        return bar.payload


def _newest_bar(db: sqlite3.Connection, number: int) -> Row | None:
    found = None
    for row in table.read_rows(db, "bar"):
        if row.payload.get("bar") == number:
            found = row
    return found
