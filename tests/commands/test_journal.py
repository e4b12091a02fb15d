"""The ``journal`` command."""

from __future__ import annotations

import csv
import io
import json
import sqlite3
from pathlib import Path

import pytest

from edgewatch.commands.cli import main
from edgewatch.record.journal import Entry, Journal
from edgewatch.wire import messages
from tests.record.entries import alert, bar, condition, stamp, window


@pytest.fixture
def file(tmp_path: Path) -> Path:
    """A journal of five bars with windows, an alert, an order and a condition, still open elsewhere in some tests."""
    path = tmp_path / "j.sqlite"
    journal = Journal(path)
    for number in range(1, 6):
        verdict = "nonconforming" if number == 4 else "conforming"
        journal.append([window(number), bar(number, verdict)], stamp=stamp(1_772_344_800.0 + number))
    reply = messages.reply(order="expect", accepted=True, order_id="=1+1", who="shift lead")
    journal.append([alert(), condition(), Entry(kind="order", body=reply)], stamp=stamp(1_772_344_900.0))
    journal.delivered([1, 2, 3])
    journal.close()
    return path


def _run(capsys: pytest.CaptureFixture[str], *words: str) -> tuple[int, str, str]:
    status = main(["journal", *words])
    out, err = capsys.readouterr()
    return status, out, err


def test_bars_as_a_table(file: Path, capsys: pytest.CaptureFixture[str]):
    """The default: a header and a line a bar."""
    status, out, _ = _run(capsys, "--journal", str(file))
    lines = out.splitlines()
    assert status == 0
    assert lines[0].split() == [
        *("seq", "time", "bar", "expected", "verdict", "burst_rate_per_m", "reach_mm", "decided_after_s"),
        *("causes", "found"),
    ]
    assert len(lines) == 6
    assert "nonconforming" in lines[4]


def test_json_lines_hold_what_was_sent(file: Path, capsys: pytest.CaptureFixture[str]):
    """Each line is the payload, with the kind, whether it was delivered, and what the laboratory found."""
    _, out, _ = _run(capsys, "bars", "windows", "--journal", str(file), "--json")
    records = [json.loads(line) for line in out.splitlines()]
    assert [record["seq"] for record in records] == list(range(1, 11))
    assert [record["record"] for record in records[:2]] == ["window", "bar"]
    assert [record["sent"] for record in records[:4]] == [True, True, True, False]
    assert records[1]["found"] is None


def test_csv_holds_every_figure_and_no_formula(file: Path, capsys: pytest.CaptureFixture[str]):
    """Read back by the csv module; nested values are JSON; a text that a spreadsheet would run is disarmed."""
    _, out, _ = _run(capsys, "bars", "orders", "--journal", str(file), "--csv")
    rows = list(csv.DictReader(io.StringIO(out)))
    bars = [row for row in rows if row["record"] == "bar"]
    assert [row["bar"] for row in bars] == ["1", "2", "3", "4", "5"]
    assert float(bars[0]["burst_rate_per_m"]) == pytest.approx(2.23456789)
    assert json.loads(bars[0]["nearest"]) == [["C45", 0.9], ["C15", 0.1]]
    (order,) = (row for row in rows if row["record"] == "order")
    assert (order["id"], order["order"]) == ("'=1+1", "expect")


@pytest.mark.parametrize(
    ("words", "bars"),
    [
        (("--last", "2"), [4, 5]),
        (("--last", "0"), []),
        (("--since", "2026-03-01T06:00:03Z"), [3, 4, 5]),
        (("--since", "2026-03-01", "--until", "2026-03-01T06:00:03Z"), [1, 2]),
        (("--until", "2026-03-01"), []),
        (("--since", "1s"), []),
    ],
)
def test_selections(file: Path, capsys: pytest.CaptureFixture[str], words: tuple[str, ...], bars: list[int]):
    """By time and by number."""
    status, out, _ = _run(capsys, "bars", "--journal", str(file), "--json", *words)
    assert status == 0
    assert [json.loads(line)["bar"] for line in out.splitlines()] == bars


def test_alerts_conditions_and_orders_are_listed(file: Path, capsys: pytest.CaptureFixture[str]):
    """A table each."""
    _, out, _ = _run(capsys, "alerts", "conditions", "orders", "relay", "--journal", str(file))
    assert "nonconforming_bar" in out
    assert "good" in out
    assert "shift lead" in out


def test_confirm_notes_what_the_laboratory_found(file: Path, capsys: pytest.CaptureFixture[str]):
    """Beside a running station; the newest finding of a bar counts."""
    station = Journal(file)
    assert _run(capsys, "--journal", str(file), "--confirm", "4", "C15", "--who", "lab")[0] == 0
    status, out, _ = _run(capsys, "--journal", str(file), "--confirm", "4", "C20", "--who", "lab")
    assert status == 0
    assert "verdict nonconforming, expected C45, found C20" in out
    station.append([bar(6)], stamp=stamp())
    station.close()
    _, out, _ = _run(capsys, "--journal", str(file), "--json")
    found = {record["bar"]: record["found"] for record in map(json.loads, out.splitlines())}
    assert found == {1: None, 2: None, 3: None, 4: "C20", 5: None, 6: None}


def test_a_bar_that_is_not_there_is_status_1(file: Path, capsys: pytest.CaptureFixture[str]):
    """It ran, and what it should note does not hold."""
    status, _, err = _run(capsys, "--journal", str(file), "--confirm", "99", "C15")
    assert status == 1
    assert "bar 99 is not in the journal" in err


@pytest.mark.parametrize(
    "words",
    [
        ("weather",),
        ("--since", "yesterday"),
        ("--since", "2026-02-30"),
        ("--last", "-1"),
        ("--confirm", "x", "C15"),
        ("--confirm", "4", "../x"),
    ],
)
def test_bad_usage_is_status_2_and_one_line(file: Path, capsys: pytest.CaptureFixture[str], words: tuple[str, ...]):
    """The operator's mistakes."""
    status, out, err = _run(capsys, "--journal", str(file), *words)
    assert (status, out) == (2, "")
    assert err.count("\n") == 1


def _foreign_database(path: Path) -> None:
    with sqlite3.connect(path) as db:
        db.execute("CREATE TABLE mine(x)")
    db.close()


def _damaged(path: Path) -> None:
    journal = Journal(path)
    for number in range(100):
        journal.append([bar(number)], stamp=stamp())
    journal.close()
    whole = path.read_bytes()
    path.write_bytes(whole[:4096] + b"\xa5" * (len(whole) - 4096))


def _altered(path: Path) -> None:
    journal = Journal(path)
    journal.append([bar(1)], stamp=stamp())
    journal.close()
    path.write_bytes(path.read_bytes().replace(b'"verdict":"conforming"', b'"verdict":"conformin!"'))


def _folder(path: Path) -> None:
    path.mkdir()


@pytest.mark.parametrize(
    "make",
    [
        lambda path: None,
        lambda path: path.write_text("[station]\n" * 100),
        lambda path: path.write_bytes(b""),
        _foreign_database,
        _damaged,
        _altered,
        _folder,
    ],
    ids=["missing", "text", "empty", "foreign", "damaged", "altered", "folder"],
)
def test_a_file_that_is_no_whole_journal_is_one_line(tmp_path: Path, capsys: pytest.CaptureFixture[str], make):  # type: ignore[no-untyped-def]
    """Status 3, one line, and the file stays as it is."""
    path = tmp_path / "x.sqlite"
    make(path)
    before = path.read_bytes() if path.is_file() else None
    status, _, err = _run(capsys, "bars", "--journal", str(path))
    assert status == 3
    assert err.count("\n") == 1
    assert str(path) in err
    assert (path.read_bytes() if path.is_file() else None) == before


def test_a_read_only_copy_can_be_read(file: Path, capsys: pytest.CaptureFixture[str]):
    """A copy on a medium without its log."""
    file.chmod(0o444)
    status, out, _ = _run(capsys, "bars", "--journal", str(file), "--json")
    assert status == 0
    assert len(out.splitlines()) == 5
