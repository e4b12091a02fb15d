"""The journal and outbox on a real SQLite file."""

from __future__ import annotations

import json
import shutil
import sqlite3
from itertools import pairwise
from pathlib import Path

import pytest

from edgewatch.errors import DeviceError
from edgewatch.record import journal as journal_module
from edgewatch.record import reading
from edgewatch.record.journal import RESERVE, Entry, Journal
from edgewatch.record.outbox import THIN_REPORT, THIN_RUN
from edgewatch.record.rows import checksum
from edgewatch.wire import messages
from tests.record.entries import alert, bar, condition, stamp, window
from tests.wire.schemas import check_message


@pytest.fixture
def file(tmp_path: Path) -> Path:
    """Where the journal of a test lies."""
    return tmp_path / "edgewatch.sqlite"


def test_a_record_and_its_message_are_one(file: Path):
    """What is appended is both a row and an outgoing message, numbered from 1, valid by its schema."""
    journal = Journal(file)
    seqs = journal.append([condition(), window(), bar(), alert()], stamp=stamp(), state={"bar": 1})
    assert seqs == (1, 2, 3, 4)
    rows, outgoing = journal.rows(), journal.pending(10)
    assert [row.seq for row in rows] == [message.seq for message in outgoing] == [1, 2, 3, 4]
    for row, message in zip(rows, outgoing, strict=True):
        assert json.loads(message.payload) == row.payload
        assert row.payload["seq"] == row.seq
        assert row.unsent
        check_message(f"x/{message.kind}", row.payload)
    assert journal.state("bar") == 1
    journal.close()


def test_a_failed_append_leaves_nothing_behind(file: Path):
    """One bad entry, and neither its neighbours nor the state are kept."""
    journal = Journal(file)
    bad = Entry(kind="alert", body={"text": object()})
    with pytest.raises(ValueError, match="no form in JSON"):
        journal.append([alert(), bad], stamp=stamp(), state={"x": 1})
    assert journal.pending(10) == []
    assert journal.state("x") is None
    assert journal.append([alert()], stamp=stamp()) == (1,)
    assert journal.status().unsent == 1
    journal.close()


def test_the_outbox_is_read_in_order_and_in_parts(file: Path):
    """Limit and ``after`` cut it; delivered messages leave, their records stay."""
    journal = Journal(file)
    journal.append([alert(str(number)) for number in range(6)], stamp=stamp())
    assert [message.seq for message in journal.pending(2, after=3)] == [4, 5]
    journal.delivered([2, 4, 99])
    journal.delivered([2])
    assert [message.seq for message in journal.pending(10)] == [1, 3, 5, 6]
    assert [row.unsent for row in journal.rows()] == [True, False, True, False, True, True]
    status = journal.status()
    assert (status.unsent, status.next_seq) == (4, 7)
    assert status.unsent_bytes == sum(len(message.payload) for message in journal.pending(10))
    journal.close()


def test_replies_keep_where_they_are_wanted(file: Path):
    """Response topic and correlation data wait with the message and go with it."""
    journal = Journal(file)
    body = messages.reply(order="view", accepted=True)
    journal.append([Entry(kind="order", body=body, reply_topic="desk", correlation=b"\x00\xff")], stamp=stamp())
    (message,) = journal.pending(1)
    assert (message.reply_topic, message.correlation) == ("desk", b"\x00\xff")
    journal.delivered([1])
    with sqlite3.connect(file) as db:
        assert db.execute("SELECT count(*) FROM route").fetchone() == (0,)
    db.close()
    journal.close()


def test_the_newest_state_stays_known(file: Path):
    """``latest`` gives the condition in force even when it was delivered and pruned long ago."""
    journal = Journal(file)
    assert journal.latest("condition") is None
    journal.append([condition(), condition("failure"), alert()], stamp=stamp())
    journal.delivered([1, 2, 3])
    found = journal.latest("condition")
    assert found is not None
    assert (found[0], json.loads(found[1])["condition"]) == (2, "failure")
    journal.close()


def test_state_outlives_the_process(file: Path):
    """Values are JSON values, replaced, and removed by None."""
    journal = Journal(file)
    journal.append([], stamp=stamp(), state={"latch": {"stop": True}, "drift": [1.5, None]})
    journal.set_state("latch", {"stop": False})
    journal.set_state("drift", None)
    journal.close()
    journal = Journal(file)
    assert journal.state("latch") == {"stop": False}
    assert journal.state("drift", "gone") == "gone"
    journal.close()


def test_rows_by_kind_time_and_number(file: Path):
    """The selections of the ``journal`` command."""
    journal = Journal(file)
    for second in range(10):
        journal.append([window(second), bar(second)], stamp=stamp(1000.0 + second, boot=f"boot-{second // 5}"))
    assert [row.stamp.utc_s for row in journal.rows("bar", since_utc_s=1003, until_utc_s=1005)] == [1003, 1004]
    assert [row.payload["bar"] for row in journal.rows("bar", last=3)] == [7, 8, 9]
    assert [row.seq for row in journal.rows(last=2)] == [19, 20]
    assert journal.rows("bar")[0].stamp == stamp(1000.0, boot="boot-0")
    assert journal.rows("bar", last=0) == []
    journal.close()


def test_seq_goes_on_after_a_restart_and_after_pruning(tmp_path: Path):
    """Numbers never come back: not after closing, not after everything old has given way."""
    file = tmp_path / "edgewatch.sqlite"
    journal = Journal(file, most_mb=1)
    expected = 1
    for _ in range(60):
        seqs = journal.append([bar(number) for number in range(50)], stamp=stamp())
        assert seqs == tuple(range(expected, expected + 50))
        expected += 50
        journal.delivered(seqs)
    journal.close()
    journal = Journal(file, most_mb=1)
    assert journal.append([bar()], stamp=stamp()) == (expected,)
    kept = journal.rows()
    assert kept[0].seq > 1000
    assert [row.seq for row in kept] == list(range(kept[0].seq, expected + 1))
    assert journal.status().used_bytes <= 1e6
    journal.close()
    assert file.stat().st_size <= 1e6


def test_unsent_records_never_give_way(file: Path):
    """Above the size limit delivered records go, and what the broker has not seen stays."""
    journal = Journal(file, most_mb=1)
    unsent = journal.append([bar(number) for number in range(100)], stamp=stamp())
    for _ in range(60):
        journal.delivered(journal.append([alert("x" * 400) for _ in range(50)], stamp=stamp()))
    assert [message.seq for message in journal.pending(1000)] == list(unsent)
    assert {row.seq for row in journal.rows("bar")} == set(unsent)
    assert len(journal.rows("alert")) < 3000
    assert journal.status().used_bytes <= 1e6
    journal.close()


@pytest.mark.slow
def test_the_limit_holds_while_all_is_unsent(file: Path):
    """Broker away at full rate until bars fill two thirds of the limit: thinned windows leave the file, and the room
    they leave is used again, so the file stays within its limit with every bar and alert in it.
    """
    journal = Journal(file, most_mb=2, thin_windows_mb=0.5)
    others: list[int] = []
    largest = second = 0
    while len(others) * 2 / 3 * 1100 < 0.66 * 2e6:  # two of three are bars
        entries = [window(second + n) for n in range(16)] + [bar(second), bar(second + 2), alert()]
        others += journal.append(entries, stamp=stamp(1e9 + second))[16:]
        second += 4
        largest = max(largest, journal.status().used_bytes)
    assert largest <= 2e6
    assert journal.status().windows_thinned > 0.75 * 4 * second
    waiting = {message.seq for message in journal.pending(10**6)}
    assert set(others) <= waiting
    rows = journal.rows()
    assert {row.seq for row in rows if row.unsent} == waiting
    assert [row.seq for row in rows] == sorted({row.seq for row in rows})
    # The broker is back: all that waits can be taken out, and old records give way again.
    journal.delivered(sorted(waiting))
    for number in range(200):
        journal.delivered(journal.append([bar(number)] * 4, stamp=stamp()))
        assert journal.status().used_bytes <= 2e6
    kept = [row.seq for row in journal.rows()]
    assert kept[0] > others[0]
    assert kept[-600:] == list(range(kept[-1] - 599, kept[-1] + 1))
    journal.close()
    with sqlite3.connect(file) as db:
        assert db.execute("PRAGMA integrity_check").fetchone() == ("ok",)
    db.close()


def test_what_unsent_messages_take_is_known(file: Path):
    """As estimated and as SQLite counts pages, for bars alone and for full rate; and what they may take."""
    journal = Journal(file, most_mb=100)
    for kinds in ([bar()], [window()], [alert("x" * 1030)], [alert("x" * 3000)], [window()] * 8 + [bar()]):
        before = journal.status()
        for _ in range(20):
            journal.append(kinds * 20, stamp=stamp())
        after = journal.status()
        estimated = after.unsent_room_bytes - before.unsent_room_bytes
        assert estimated == pytest.approx(after.used_bytes - before.used_bytes, rel=0.25)
    assert journal.status().room_bytes == 100e6
    journal.close()
    journal = Journal(file, most_mb=1e9)
    free = shutil.disk_usage(file.parent).free
    assert journal.status().room_bytes == pytest.approx(free, rel=0.01)
    journal.close()


def test_records_are_synced_and_taking_out_is_not(file: Path):
    """Durability as it was chosen: a power cut may lose no record that ``append`` returned, and may bring a delivered
    message back. Asked of SQLite itself at the moment of each commit.
    """
    journal = Journal(file)
    db = journal._db
    assert db is not None
    statements: list[str] = []
    db.set_trace_callback(statements.append)
    seqs = journal.append([bar(), window()], stamp=stamp(), state={"latch": 1})
    assert db.execute("PRAGMA synchronous").fetchone() == (2,)  # FULL
    journal.set_state("latch", 2)
    assert db.execute("PRAGMA synchronous").fetchone() == (2,)
    journal.delivered(seqs)
    assert db.execute("PRAGMA synchronous").fetchone() == (1,)  # NORMAL
    db.set_trace_callback(None)
    told = [text for text in statements if text.startswith(("PRAGMA synchronous =", "BEGIN", "COMMIT"))]
    begin = ["BEGIN IMMEDIATE", "COMMIT"]
    full, normal = ["PRAGMA synchronous = FULL", *begin], ["PRAGMA synchronous = NORMAL", *begin]
    assert told == [*full, *full, *normal]  # one transaction each, its level set before it begins
    assert db.execute("PRAGMA journal_mode").fetchone() == ("wal",)
    journal.close()


@pytest.mark.slow
def test_an_hour_at_full_rate_writes_less_than_a_card_stands(file: Path):
    """Bytes handed to the system for the file and its log, at four windows a second, a bar every two, all delivered:
    250 MB an hour, so a card that stands 20 TB lasts nine years. `tests.bench.bench_journal` measures what the kernel
    charges for the disk (168 MB an hour).
    """
    journal = Journal(file, most_mb=1, thin_windows_mb=0.25)
    minutes = 4
    before = _written_bytes()
    for step in range(minutes * 60 * 4):
        journal.append([window(step), bar(step)] if step % 8 == 7 else [window(step)], stamp=stamp(1e9 + step / 4))
        if step % 4 == 3:
            journal.delivered([message.seq for message in journal.pending(100)])
    written = (_written_bytes() - before) * 60 / minutes
    assert written < 250e6
    assert written > 168e6 / 17  # the payload at least, or the count is wrong
    journal.close()


def _written_bytes() -> int:
    """Bytes that this process has handed to the system to write."""
    lines = Path("/proc/self/io").read_text().splitlines()
    return next(int(line.split()[1]) for line in lines if line.startswith("wchar"))


def test_windows_are_thinned_by_the_stated_rule_and_counted(file: Path):
    """Broker away: every second window is sent, then every fourth; all else stays; what gave way is published."""
    journal = Journal(file, most_mb=100, thin_windows_mb=1)
    windows, others = [], []
    for number in range(400):
        seqs = journal.append([*(window(number) for _ in range(24)), bar(number)], stamp=stamp())
        windows += seqs[:24]
        others.append(seqs[24])
    waiting = {message.seq: message for message in journal.pending(10**6)}
    kept = [place for place, seq in enumerate(windows) if seq in waiting]
    assert set(others) <= set(waiting)
    assert 0.5e6 < sum(len(waiting[windows[place]].payload) for place in kept) <= 1e6
    # Old and new alike, evenly over the whole outage; a sweep under way leaves two neighbouring steps.
    gaps = [after - before for before, after in pairwise(kept)]
    assert set(gaps) <= {4, 8}
    told = [json.loads(message.payload) for message in waiting.values() if message.kind == "thinned"]
    gone = len(windows) - len(kept)
    assert journal.status().windows_thinned == gone
    assert 0 <= gone - sum(one["count"] for one in told) < THIN_REPORT
    for one in told:
        check_message("x/thinned", one)
    assert len(journal.rows("window")) == len(windows)  # the records stay
    journal.close()

    # The broker is back: what is left is reported, and all windows are sent again.
    journal = Journal(file, thin_windows_mb=1)
    assert journal.status().windows_thinned == gone
    journal.delivered(list(waiting))
    seqs = journal.append([window(), window(), window()], stamp=stamp())
    told += [json.loads(message.payload) for message in journal.pending(10) if message.kind == "thinned"]
    after = journal.append([window(), window(), window()], stamp=stamp())
    assert sum(one["count"] for one in told) == told[-1]["total"] == journal.status().windows_thinned
    assert told[-1]["keep_every"] == 1
    assert set(after) <= {message.seq for message in journal.pending(20)}
    journal.close()


def test_a_sweep_takes_bounded_steps(file: Path):
    """However many windows wait, one transaction looks at a bounded run of them."""
    journal = Journal(file, most_mb=100, thin_windows_mb=5)
    seqs: list[int] = []
    while journal.status().windows_thinned == 0:
        seqs += journal.append([window()] * 500, stamp=stamp())
    assert len(seqs) > 2 * THIN_RUN
    assert journal.status().windows_thinned <= (THIN_RUN + 500) // 2
    while journal.status().windows_thinned < len(seqs) // 2:
        seqs += journal.append([window()], stamp=stamp())
    waiting = {message.seq for message in journal.pending(10**6)}
    places = [place for place, seq in enumerate(seqs) if seq in waiting]
    assert all(after - before == 2 for before, after in pairwise(places))
    journal.close()


def test_a_second_process_or_journal_is_refused(file: Path):
    """Two stations on one journal would mix their numbers."""
    journal = Journal(file)
    with pytest.raises(DeviceError, match="one station a journal"):
        Journal(file)
    journal.close()
    Journal(file).close()


def test_a_closed_journal_says_so(file: Path):
    """Closing twice is fine, using it afterwards is a named error."""
    journal = Journal(file)
    journal.close()
    journal.close()
    with pytest.raises(DeviceError, match="is closed"):
        journal.append([alert()], stamp=stamp())


def test_a_file_deleted_or_replaced_under_us_is_begun_anew_above(file: Path):
    """Numbers go on above everything that may have been sent."""
    journal = Journal(file)
    journal.append([alert()], stamp=stamp())
    for ending in ("", "-wal", "-shm"):
        Path(f"{file}{ending}").unlink()
    (seq,) = journal.append([alert()], stamp=stamp())
    assert seq == 1 + RESERVE + 1
    assert journal.rows()[0].seq == seq
    journal.close()
    file.unlink()
    for _ in range(3):  # opened and closed without a record: nothing is used up, nothing forgotten
        journal = Journal(file)
        assert journal.status().next_seq == 2 * (RESERVE + 1) + 1
        journal.close()


def test_a_folder_that_cannot_be_made_is_a_device_error(tmp_path: Path):
    """A file where the folder should be."""
    (tmp_path / "x").write_text("")
    with pytest.raises(DeviceError, match="folder cannot be made"):
        Journal(tmp_path / "x" / "y" / "j.sqlite")


def test_only_journalled_kinds_can_be_entries():
    """A summary is live and has no number."""
    with pytest.raises(ValueError, match="not journalled"):
        Entry(kind="summary", body={})


def test_the_check_sum_covers_number_and_payload():
    """A record that was altered, or stands under another number, is told."""
    assert len({checksum(1, b"a"), checksum(2, b"a"), checksum(1, b"b")}) == 3


def test_starts_without_records_are_forgotten(file: Path, monkeypatch: pytest.MonkeyPatch):
    """A board that starts again and again fills no table: the names of starts go when their records have gone."""
    monkeypatch.setattr(journal_module, "MOST_BOOTS", 10)
    journal = Journal(file, most_mb=1, thin_windows_mb=0.2)
    first = journal.append([bar(0)], stamp=stamp(boot="first, and still unsent"))
    for number in range(200):
        seqs = journal.append([bar(n) for n in range(30)], stamp=stamp(boot=f"boot-{number}"))
        journal.delivered(seqs)
    rows = journal.rows()
    assert rows[0].seq == first[0]
    assert rows[0].stamp.boot == "first, and still unsent"
    assert rows[-1].stamp.boot == "boot-199"
    named = {row.stamp.boot for row in rows}
    assert "None" not in named
    journal.close()
    with sqlite3.connect(file) as db:
        assert db.execute("SELECT count(*) FROM boot").fetchone()[0] <= len(named) + 2 * 10
    db.close()


def test_a_listing_left_open_does_not_let_the_log_grow(file: Path):
    """Somebody pages through `edgewatch journal` for hours while the station writes on: the log begins anew."""
    journal = Journal(file)
    for number in range(20):
        journal.append([bar(number)] * 100, stamp=stamp())
    listing = reading.read_records(file, ("bar",))
    seen = [next(listing)]
    before = file.stat().st_size
    for number in range(400):
        journal.append([bar(number)] * 20, stamp=stamp())
    assert file.stat().st_size > before + 5e6  # moved into the file, not only into the log
    assert Path(f"{file}-wal").stat().st_size < 6e6
    seen += listing
    assert [row.seq for row in seen] == list(range(1, 10_001))
    journal.close()
