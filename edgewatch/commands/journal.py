"""``edgewatch journal``: list and export what the station recorded, and note what the laboratory found."""

from __future__ import annotations

import argparse
import csv
import datetime as dt
import getpass
import json
import re
import sys
import time
from collections.abc import Iterable, Iterator
from itertools import chain
from pathlib import Path
from typing import Any

from edgewatch.commands import options
from edgewatch.errors import SettingsError
from edgewatch.record import reading
from edgewatch.record.journal import Row
from edgewatch.record.reading import Finding
from edgewatch.settings import GRADE_NAME
from edgewatch.wire.times import read_time, write_time

EXAMPLE = """\
edgewatch journal bars --last 20
  edgewatch journal bars windows --since 2026-03-01T06:00:00Z --csv > shift.csv
  edgewatch journal alerts --since 24h --json
  edgewatch journal --confirm 117 42CrMo4"""

WHAT = {
    "bars": "bar",
    "windows": "window",
    "alerts": "alert",
    "orders": "order",
    "conditions": "condition",
    "expected": "expected",
    "relay": "relay",
    "thinned": "thinned",
}
"""Word on the command line -> kind of record."""

_TABLE = {
    "bar": ("bar", "expected", "verdict", "burst_rate_per_m", "reach_mm", "decided_after_s", "causes", "found"),
    "window": ("bar", "streaks", "bursts", "track_m", "burst_rate_per_m", "reach_mm"),
    "alert": ("alert", "state", "bar", "who", "text"),
    "order": ("order", "id", "who", "accepted", "reason"),
    "condition": ("condition", "causes"),
    "expected": ("grade", "heat", "order_number", "who"),
    "relay": ("wanted", "read_back", "latched", "reason"),
    "thinned": ("count", "first_seq", "last_seq", "keep_every", "total"),
}
"""Columns of the table for people; CSV and JSON lines hold everything."""

_AGO = re.compile(r"([0-9]{1,6})([smhd])")
_DATE = re.compile(r"[0-9]{4}-[0-9]{2}-[0-9]{2}")
_UNIT_S = {"s": 1, "m": 60, "h": 3600, "d": 86400}


def declare(parser: argparse.ArgumentParser) -> None:
    """Options of the command."""
    parser.add_argument("what", nargs="*", metavar="WHAT", help=f"{', '.join(WHAT)} (default: bars)")
    options.add_station(parser)
    parser.add_argument("--journal", metavar="FILE", help="journal file (overrides journal.file)")
    when = "an RFC 3339 time, a date, or how long ago: 90s, 30m, 8h, 7d"
    parser.add_argument("--since", metavar="TIME", help=f"recorded then or later: {when}")
    parser.add_argument("--until", metavar="TIME", help=f"recorded before: {when}")
    parser.add_argument("--last", type=int, metavar="N", help="the last N only")
    form = parser.add_mutually_exclusive_group()
    form.add_argument("--csv", action="store_true", help="comma-separated values (RFC 4180), one header line")
    form.add_argument("--json", action="store_true", help="JSON lines, each record as it was sent")
    parser.add_argument(
        "--confirm", nargs=2, metavar=("BAR", "GRADE"), help="note the grade that the laboratory found for a bar"
    )
    parser.add_argument("--who", metavar="NAME", help="who confirms (default: the user's login name)")


def run(args: argparse.Namespace) -> int:
    """List, export or confirm; 1 when a bar to confirm is not there."""
    unknown = [word for word in args.what if word not in WHAT]
    if unknown:
        raise SettingsError(f"{unknown[0]}: no such records; known are {', '.join(WHAT)}")
    if args.last is not None and args.last < 0:
        raise SettingsError(f"--last {args.last}: a whole number from 0 is needed")
    settings, folder = options.load_settings(args)
    path = folder / settings.journal.file
    if args.confirm:
        return _confirm(path, args)
    kinds = tuple(dict.fromkeys(WHAT[word] for word in args.what or ["bars"]))
    now_utc_s = time.time()
    since_utc_s, until_utc_s = (
        None if text is None else read_when(option, text, now_utc_s=now_utc_s)
        for option, text in (("--since", args.since), ("--until", args.until))
    )
    rows = reading.read_records(path, kinds, since_utc_s=since_utc_s, until_utc_s=until_utc_s, last=args.last)
    findings = reading.read_findings(path) if "bar" in kinds else {}
    records = (_record(row, findings) for row in rows)
    if args.json:
        for record in records:
            print(json.dumps(record, ensure_ascii=False, allow_nan=False))
    elif args.csv:
        _print_csv(records)
    else:
        _print_tables(records, kinds)
    return 0


def read_when(option: str, text: str, *, now_utc_s: float) -> float:
    """Return seconds since 1970 UTC of a time, a date, or how long ago. Raises ``SettingsError`` naming ``option``."""
    ago = _AGO.fullmatch(text)
    if ago:
        return now_utc_s - int(ago[1]) * _UNIT_S[ago[2]]
    try:
        return read_time(f"{text}T00:00:00Z" if _DATE.fullmatch(text) else text)
    except ValueError as error:
        raise SettingsError(f"{option} {text}: {error}; or a date, or how long ago, such as 8h") from None


def _confirm(path: Path, args: argparse.Namespace) -> int:
    number, grade = args.confirm
    if not (number.isascii() and number.isdigit() and len(number) <= 15):
        raise SettingsError(f"--confirm {number}: the number of a bar is needed, as `edgewatch journal bars` lists it")
    if not GRADE_NAME.fullmatch(grade):
        raise SettingsError(f"--confirm {number} {grade}: a grade name is needed")
    who = args.who if args.who is not None else _login()
    try:
        bar = reading.confirm(path, Finding(bar=int(number), grade=grade, who=who[:128], utc_s=time.time()))
    except LookupError as error:
        print(f"edgewatch: {error.args[0]}", file=sys.stderr)
        return 1
    print(f"bar {number}: verdict {bar['verdict']}, expected {bar['expected'] or 'nothing'}, found {grade}")
    return 0


def _login() -> str:
    try:
        return getpass.getuser()
    except (OSError, KeyError, ImportError):
        return ""


def _record(row: Row, findings: dict[int, Finding]) -> dict[str, Any]:
    record: dict[str, Any] = {"record": row.kind, **row.payload, "sent": not row.unsent}
    if row.kind == "bar":
        finding = findings.get(row.payload.get("bar", -1))
        record["found"] = finding.grade if finding else None
        record["found_by"] = finding.who if finding else None
        record["found_time"] = write_time(finding.utc_s) if finding else None
    return record


def _print_csv(records: Iterable[dict[str, Any]]) -> None:
    """One header: the keys of the first record of each kind. Nested values are JSON; null is an empty field."""
    kept = list(records)
    first_of_kind = {record["record"]: record for record in reversed(kept)}
    columns = list(dict.fromkeys(chain.from_iterable(first_of_kind[kind] for kind in sorted(first_of_kind))))
    writer = csv.writer(sys.stdout)
    if columns:
        writer.writerow(columns)
    for record in kept:
        writer.writerow([_cell(record.get(column)) for column in columns])


def _cell(value: Any) -> Any:
    if isinstance(value, (dict, list, bool)):
        return json.dumps(value, ensure_ascii=False)
    # A spreadsheet takes a text that begins so for a formula: what came over the network must not become one.
    if isinstance(value, str) and value[:1] in ("=", "+", "-", "@"):
        return f"'{value}"
    return value


def _print_tables(records: Iterable[dict[str, Any]], kinds: tuple[str, ...]) -> None:
    """A table a kind, each as wide as its contents."""
    kept = list(records)
    for kind in kinds:
        columns = ("seq", "time", *_TABLE[kind])
        lines = [columns, *_lines((record for record in kept if record["record"] == kind), columns)]
        widths = [max(len(line[place]) for line in lines) for place in range(len(columns))]
        for line in lines:
            print("  ".join(cell.ljust(width) for cell, width in zip(line, widths, strict=True)).rstrip())


def _lines(records: Iterable[dict[str, Any]], columns: tuple[str, ...]) -> Iterator[tuple[str, ...]]:
    for record in records:
        yield tuple(_shown(column, record.get(column)) for column in columns)


def _shown(column: str, value: Any) -> str:
    if value is None:
        return "-"
    if column == "time":
        return _local(value)
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, float):
        return f"{value:.4g}"
    if isinstance(value, list):
        return ", ".join(str(part["cause"] if isinstance(part, dict) and "cause" in part else part) for part in value)
    return "".join(mark if mark.isprintable() else "?" for mark in str(value))


def _local(text: str) -> str:
    """The time on the wall beside whoever reads; UTC stays in CSV and JSON."""
    try:
        return dt.datetime.fromtimestamp(read_time(text)).astimezone().strftime("%Y-%m-%d %H:%M:%S")
    except (ValueError, OSError, OverflowError):
        return text
