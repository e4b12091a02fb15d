"""The journal when the world fails: locked, full, damaged, foreign, torn."""

from __future__ import annotations

import contextlib
import os
import random
import resource
import shutil
import signal
import sqlite3
import subprocess
import tempfile
import time
from collections.abc import Iterator
from pathlib import Path

import pytest
from hypothesis import HealthCheck, example, given, settings
from hypothesis import strategies as st

from edgewatch.errors import DeviceError
from edgewatch.record import reading
from edgewatch.record.journal import RESERVE, Journal
from tests.record.entries import alert, bar, condition, stamp, window


@pytest.fixture
def file(tmp_path: Path) -> Path:
    """Where the journal of a test lies."""
    return tmp_path / "edgewatch.sqlite"


def test_a_locked_file_is_a_device_error_and_then_works_again(file: Path):
    """Another program holds it for longer than we wait: nothing of the call is kept, and it may be made again."""
    journal = Journal(file)
    journal.append([alert()], stamp=stamp())
    other = sqlite3.connect(file, isolation_level=None)
    other.execute("BEGIN IMMEDIATE")
    with pytest.raises(DeviceError, match="locked"):
        journal.append([alert()], stamp=stamp())
    with pytest.raises(DeviceError, match="locked"):
        journal.delivered([1])
    assert [message.seq for message in journal.pending(5)] == [1]  # reading goes on
    other.execute("ROLLBACK")
    other.close()
    assert journal.append([alert()], stamp=stamp()) == (2,)
    assert journal.status().unsent == 2
    journal.close()


class SmallDisk:
    """A file system that can be full: a tmpfs where root may mount one, elsewhere a limit on the size of files."""

    def __init__(self, folder: Path, size: int) -> None:
        self.folder = folder
        self._size = size
        self._mounted = os.geteuid() == 0
        self._limits = resource.getrlimit(resource.RLIMIT_FSIZE)
        folder.mkdir()
        if self._mounted:
            subprocess.run(["mount", "-t", "tmpfs", "-o", f"size={size}", "none", str(folder)], check=True)
        else:
            signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
            resource.setrlimit(resource.RLIMIT_FSIZE, (size, self._limits[1]))

    def fill(self) -> None:
        """Leave no room at all."""
        if self._mounted:
            with contextlib.suppress(OSError), (self.folder / "filler").open("wb", buffering=0) as target:
                while True:
                    target.write(b"x" * 4096)
        else:
            resource.setrlimit(resource.RLIMIT_FSIZE, (20, self._limits[1]))

    def make_room(self) -> None:
        """Let ten times as much fit."""
        if self._mounted:
            options = f"remount,size={self._size * 10}"
            subprocess.run(["mount", "-o", options, str(self.folder)], check=True)
        else:
            resource.setrlimit(resource.RLIMIT_FSIZE, (self._size * 10, self._limits[1]))

    def close(self) -> None:
        """Unmount, or lift the limit."""
        if self._mounted:
            subprocess.run(["umount", "--lazy", str(self.folder)], check=True)
        else:
            resource.setrlimit(resource.RLIMIT_FSIZE, self._limits)


@pytest.fixture
def small_disk(tmp_path: Path) -> Iterator[SmallDisk]:
    """A disk of 400 kB."""
    disk = SmallDisk(tmp_path / "disk", 400_000)
    yield disk
    disk.close()


def test_a_full_disk_is_a_device_error_and_nothing_written_is_lost(small_disk: SmallDisk):
    """What was appended before stays whole; after room is made the same call works and numbers have no gap."""
    journal = Journal(small_disk.folder / "j.sqlite")
    written = 0
    with pytest.raises(DeviceError, match=r"full|I/O"):
        while True:
            journal.append([alert("x" * 500)], stamp=stamp())
            written += 1
    assert written > 20
    with pytest.raises(DeviceError):
        journal.append([bar()] * 200, stamp=stamp())
    assert [message.seq for message in journal.pending(10**4)] == list(range(1, written + 1))
    small_disk.make_room()
    assert journal.append([bar()], stamp=stamp()) == (written + 1,)
    assert [row.seq for row in journal.rows()] == list(range(1, written + 2))
    journal.close()


def test_a_disk_that_is_full_at_the_start_is_a_device_error(small_disk: SmallDisk):
    """Opening fails with the reason, and works once there is room."""
    small_disk.fill()
    with pytest.raises(DeviceError, match=r"full|I/O|written"):
        Journal(small_disk.folder / "j.sqlite")
    small_disk.make_room()
    journal = Journal(small_disk.folder / "j.sqlite")
    assert journal.append([alert()], stamp=stamp()) == (1,)
    journal.close()


def test_a_patient_journal_is_opened_when_it_can_be(small_disk: SmallDisk):
    """A station starts on a full disk too: each call says so until there is room."""
    small_disk.fill()
    journal = Journal(small_disk.folder / "j.sqlite", patient=True)
    for _ in range(2):
        with pytest.raises(DeviceError, match=r"full|I/O|written"):
            journal.append([alert()], stamp=stamp())
    with pytest.raises(DeviceError):
        journal.state("latch")
    small_disk.make_room()
    assert journal.append([alert()], stamp=stamp()) == (1,)
    journal.close()


# ---------------------------------------------------------------------- damage


def _filled(file: Path, count: int = 60) -> bytes:
    """Make a journal of ``count`` records, closed, and return its bytes."""
    journal = Journal(file)
    for number in range(count // 3):
        journal.append([window(number), bar(number), condition()], stamp=stamp(1000.0 + number))
    journal.delivered(range(1, count // 2))
    journal.close()
    return file.read_bytes()


def test_a_damaged_file_is_set_aside_whole_and_a_new_one_begun_above(file: Path):
    """Not a byte of the damaged file is lost, and no number comes twice."""
    good = _filled(file)
    spoiled = good[:4096] + random.Random(1).randbytes(len(good) - 4096)
    file.write_bytes(spoiled)
    told: list[tuple[Path, str]] = []
    journal = Journal(file, on_set_aside=lambda path, reason: told.append((path, reason)))
    ((aside, reason),) = told
    assert aside.read_bytes() == spoiled
    assert aside.parent == file.parent
    assert reason
    assert 60 < journal.append([alert()], stamp=stamp())[0] <= 60 + RESERVE
    journal.close()


def test_what_is_still_whole_is_taken_over(file: Path):
    """Unsent records keep their numbers and go out; values such as a latched stop are kept; new numbers are above."""
    journal = Journal(file)
    for number in range(200):
        journal.append([bar(number), condition("failure")], stamp=stamp(1000.0 + number), state={"latch": number})
    sent = journal.pending(1000)
    journal.delivered([message.seq for message in sent[:300]])
    waiting = {message.seq: message.payload for message in journal.pending(1000)}
    journal.close()
    whole = file.read_bytes()
    at = whole.index(b'"seq":150,')  # in the middle of the records, far from the tables' roots
    file.write_bytes(whole[:at] + b"\xff" * 3 + whole[at + 3 :])
    with sqlite3.connect(file) as db:  # and one unsent record altered, so that one is not whole
        db.execute("UPDATE record SET payload = x'00' WHERE seq = 390")
    db.close()
    told: list[str] = []
    journal = Journal(file, on_set_aside=lambda path, reason: told.append(reason))
    saved = {message.seq: message.payload for message in journal.pending(1000)}
    assert saved == {seq: payload for seq, payload in waiting.items() if seq != 390}
    assert "taken over: 99 unsent records, 1 kept values" in told[0]
    assert journal.state("latch") == 199
    latest = journal.latest("condition")
    assert latest is not None
    assert latest[0] == 400
    assert journal.append([alert()], stamp=stamp())[0] > 400
    assert journal.rows()[-1].stamp.boot == "boot-1"
    journal.close()


def test_damage_found_while_running_loses_nothing_of_the_call(file: Path):
    """The pages go bad under an open journal: the records of that very call are in the new file."""
    _filled(file, count=3000)
    told: list[Path] = []
    journal = Journal(file, on_set_aside=lambda path, reason: told.append(path))
    size = file.stat().st_size
    with file.open("r+b") as target:
        target.write(random.Random(2).randbytes(size))
    # Pages that SQLite has cached hide the damage for a while, as they would on a real card.
    seqs = [journal.append([alert("x" * 300) for _ in range(20)], stamp=stamp())[0] for _ in range(60)]
    journal.rows()
    assert len(told) == 1
    assert seqs == sorted(set(seqs))
    assert seqs[-1] > 3000
    assert journal.append([alert()], stamp=stamp())[0] > seqs[-1]
    journal.close()


def test_a_damaged_file_that_still_waits_is_told_at_each_start_once(file: Path, monkeypatch: pytest.MonkeyPatch):
    """Undelivered records lie in it: it stays, whatever is kept, and every start says so until it is taken over."""
    good = _filled(file, 400)
    file.write_bytes(good[: len(good) - 2048] + b"\xff" * 2048)

    def full(aside: Path, db: object) -> tuple[int, int]:
        raise sqlite3.OperationalError("database or disk is full")

    told: list[str] = []

    def start() -> Journal:
        return Journal(file, keep_damaged=1, on_set_aside=lambda path, reason: told.append(f"{path.name}: {reason}"))

    with monkeypatch.context() as patch:
        patch.setattr("edgewatch.record.journal.salvage", full)
        start().close()
        (waiting,) = file.parent.glob("*-unsent")
        journal = start()
        file.rename(f"{file}.away")  # it is opened anew, and does not tell again
        journal.append([alert()], stamp=stamp())
        journal.close()
    assert len(told) == 2
    assert all(text.startswith(waiting.name) and "disk is full" in text for text in told)
    start().close()
    assert len(told) == 3 and "taken over: " in told[2]
    assert not list(file.parent.glob("*-unsent"))


def test_two_damaged_files_in_one_second_do_not_overwrite_each_other(file: Path):
    """Names are kept apart."""
    told: list[Path] = []
    for _ in range(3):
        _filled(file, 6)
        file.write_bytes(b"SQLite format 3\x00" + b"\xff" * 8000)
        Journal(file, on_set_aside=lambda path, _: told.append(path), utc=lambda: 1e9).close()
    assert len(set(told)) == 3
    assert all(path.exists() for path in told)


def test_a_damaged_file_without_its_number_file_jumps_ahead_by_time(file: Path):
    """Seconds since 1970 exceed any count of records; the header alone tells that the file is ours."""
    good = _filled(file)
    Path(f"{file}.seq").unlink()
    file.write_bytes(good[:100] + b"\x00" * (len(good) - 100))
    journal = Journal(file, utc=lambda: 1_800_000_000.0)
    assert journal.append([alert()], stamp=stamp())[0] > 1_800_000_000
    journal.close()


def test_torn_number_files_are_survived(file: Path):
    """One slot spoiled: the other counts. Both spoiled: the journal itself still knows."""
    _filled(file)
    numbers = Path(f"{file}.seq")
    whole = numbers.read_bytes()
    for torn in (b"x" * 32 + whole[32:], whole[:7], b"", b"\xff" * 64):
        numbers.write_bytes(torn)
        journal = Journal(file)
        assert journal.append([alert()], stamp=stamp())[0] > 60
        journal.close()


@pytest.mark.parametrize("content", [b"[station]\nname = 'wheel-a'\n" * 50, b"\x00" * 5000, b"x"])
def test_a_foreign_file_is_refused_and_left_alone(file: Path, content: bytes):
    """A slip in the settings must not move somebody's file."""
    file.write_bytes(content)
    with pytest.raises(DeviceError, match="is not a journal"):
        Journal(file)
    assert file.read_bytes() == content


def test_a_foreign_database_is_refused_and_left_alone(file: Path):
    """A SQLite file of another program."""
    with sqlite3.connect(file) as db:
        db.execute("CREATE TABLE mine(x)")
    db.close()
    before = file.read_bytes()
    with pytest.raises(DeviceError, match="is not a journal"):
        Journal(file)
    assert file.read_bytes() == before


def test_a_journal_of_a_newer_version_is_refused_and_left_alone(file: Path):
    """Going back to an older program must not spoil the file."""
    _filled(file)
    with sqlite3.connect(file) as db:
        db.execute("PRAGMA user_version = 99")
    db.close()
    with pytest.raises(DeviceError, match="newer version"):
        Journal(file)
    assert not list(file.parent.glob("*.damaged*"))


@pytest.mark.parametrize(
    ("at", "content"),
    [(18, b"\x03\x03"), (18, b"\x02\x01"), (44, b"\x00\x00\x00\x09"), (16, b"\x00\x01"), (56, b"\x00\x00\x00\x02")],
    ids=["read only", "mixed versions", "schema format", "page size", "UTF-16"],
)
def test_headers_that_fuzzing_found(file: Path, at: int, content: bytes):
    """Single fields of the header (section 1.3 of the file format) that SQLite takes for anything but damage."""
    good = _filled(file)
    file.write_bytes(good[:at] + content + good[at + len(content) :])
    told: list[Path] = []
    journal = Journal(file, on_set_aside=lambda path, reason: told.append(path))
    assert journal.append([alert()], stamp=stamp())[0] > 60
    assert len(told) == 1
    journal.close()


@pytest.mark.parametrize(
    ("before", "after"),
    [
        (b"CREATE TABLE boot(", b"CREATE TABLE boo\xa9("),
        (b"seq INTEGER PRIMARY KEY, kind TEXT NOT NULL, boot", b"seq INTEGEQ PRIMARY KEY, kind TEXT NOT NULL, boot"),
        (b"CREATE TABLE outbox(seq INTEGER", b"CREATE TABLE outbox(seq \xc5NTEGER"),
    ],
    ids=["table name", "number that is none", "type"],
)
def test_table_definitions_that_fuzzing_found(file: Path, before: bytes, after: bytes):
    """SQLite quotes them in error texts that are not UTF-8 then, or hands out numbers that are NULL."""
    good = _filled(file)
    assert good.count(before) == 1
    file.write_bytes(good.replace(before, after))
    with contextlib.suppress(DeviceError):
        list(reading.read_records(file, ("bar", "window")))
    journal = Journal(file)
    assert journal.append([alert()], stamp=stamp())[0] > 60
    assert all(row.seq > 0 for row in journal.rows())
    journal.close()


@settings(max_examples=60, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(
    changes=st.lists(st.tuples(st.floats(0, 1, exclude_max=True), st.binary(min_size=1, max_size=64)), max_size=8),
    length=st.floats(0, 1) | st.just(1.0),
)
@example(changes=[], length=1.0)
@example(changes=[], length=0.5)
@example(changes=[(0.0, b"\x00" * 64)], length=1.0)
def test_any_spoiled_file_opens_whole_or_is_set_aside(changes: list[tuple[float, bytes]], length: float):
    """Whatever happens to the bytes: never an exception but DeviceError, no altered record is ever handed out, and the
    next number is above every number given before.
    """
    with tempfile.TemporaryDirectory() as folder:
        file = Path(folder) / "j.sqlite"
        shutil.copy(_template(), file)
        shutil.copy(f"{_template()}.seq", f"{file}.seq")
        spoiled = bytearray(file.read_bytes())
        for place, content in changes:
            at = int(place * len(spoiled))
            spoiled[at : at + len(content)] = content[: len(spoiled) - at]
        spoiled = spoiled[: int(length * len(spoiled))]
        file.write_bytes(spoiled)
        originals = _originals()
        journal = Journal(file)
        try:
            for message in journal.pending(1000):
                assert originals[message.seq] == message.payload
            for row in journal.rows():
                assert row.seq in originals
            (seq,) = journal.append([alert()], stamp=stamp())
            assert seq > 60
        finally:
            journal.close()


_CACHE: dict[str, Path] = {}


def _template() -> Path:
    if "file" not in _CACHE:
        _CACHE["file"] = Path(tempfile.mkdtemp()) / "template.sqlite"
        _filled(_CACHE["file"])
    return _CACHE["file"]


def _originals() -> dict[int, bytes]:
    with sqlite3.connect(f"file:{_template()}?mode=ro", uri=True) as db:
        found = dict(db.execute("SELECT seq, payload FROM record").fetchall())
    db.close()
    return found


def test_a_torn_log_gives_a_whole_prefix(tmp_path: Path):
    """Power cut while the log is written: cut it anywhere, and whole transactions are left, in order."""
    file = tmp_path / "j.sqlite"
    journal = Journal(file)
    for number in range(12):
        journal.append([window(number), bar(number)], stamp=stamp())
    log = Path(f"{file}-wal").read_bytes()
    base, numbers = file.read_bytes(), Path(f"{file}.seq").read_bytes()
    journal.close()
    rng = random.Random(5)
    found = set()
    for cut in [0, len(log), *(rng.randrange(len(log)) for _ in range(40))]:
        copy = tmp_path / f"cut-{cut}" / "j.sqlite"
        copy.parent.mkdir(exist_ok=True)
        copy.write_bytes(base)
        Path(f"{copy}-wal").write_bytes(log[:cut])
        Path(f"{copy}.seq").write_bytes(numbers)
        torn = Journal(copy)
        seqs = [row.seq for row in torn.rows()]
        assert seqs == [message.seq for message in torn.pending(100)]
        assert seqs == list(range(1, len(seqs) + 1)) or not seqs
        assert len(seqs) % 2 == 0
        found.add(len(seqs))
        torn.close()
    assert {0, 24} <= found
    assert len(found) > 6


def _asides(file: Path) -> list[Path]:
    """What was set aside; each log beside it belongs to a file that is there."""
    found = sorted(path for path in file.parent.iterdir() if ".damaged-" in path.name)
    files = [path for path in found if not path.name.endswith(("-wal", "-shm"))]
    assert {path.name[:-4] for path in found} - {path.name[:-4] for path in files} <= {path.name for path in files}
    return files


def _spoil(file: Path) -> None:
    file.write_bytes(b"SQLite format 3\x00" + b"\xff" * 8000)


def test_damaged_files_have_a_bound_and_each_deletion_is_said(file: Path):
    """A card that damages the file again and again does not fill the disk; the newest stay, with their logs."""
    told: list[tuple[Path, str]] = []
    (file.parent / f"{file.name}.damaged-by-hand").write_text("not ours to delete")
    for number in range(8):
        _filled(file, 6)
        _spoil(file)
        Path(f"{file}-wal").write_bytes(b"log")
        Journal(
            file,
            keep_damaged=3,
            on_set_aside=lambda path, reason: told.append((path, reason)),
            utc=lambda number=number: 1e9 + number // 2,  # type: ignore[misc]
        ).close()
    names = [path.name for path, _ in told]
    kept = {path.name for path in _asides(file)} - {f"{file.name}.damaged-by-hand"}
    assert kept == set(names[-3:])
    said = [reason.partition("deleted to make room: ")[2] for _, reason in told]
    assert said == ["", "", "", *names[:5]]


def test_the_newest_damaged_file_stays_whatever_the_clock_says(file: Path):
    """A board that wakes in 1970 sets aside a file that seems to be the oldest."""
    told: list[Path] = []
    for utc_s in (1.8e9, 1.8e9 + 60, 0.0):
        _filled(file, 6)
        _spoil(file)
        Journal(
            file,
            keep_damaged=1,
            on_set_aside=lambda path, _: told.append(path),
            utc=lambda utc_s=utc_s: utc_s,  # type: ignore[misc]
        ).close()
    assert _asides(file) == [told[-1]]


@contextlib.contextmanager
def _largest_file(size: int) -> Iterator[None]:
    """No file of this process may grow beyond ``size`` bytes, until the block ends."""
    handler = signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
    soft, hard = resource.getrlimit(resource.RLIMIT_FSIZE)
    resource.setrlimit(resource.RLIMIT_FSIZE, (size, hard))
    try:
        yield
    finally:
        resource.setrlimit(resource.RLIMIT_FSIZE, (soft, hard))
        signal.signal(signal.SIGXFSZ, handler)


def test_what_could_not_be_taken_over_is_kept_and_taken_over_later(file: Path):
    """Room for a new file and not for the unsent records: no number of damaged files deletes the one that holds them,
    and they go out once there is room.
    """
    journal = Journal(file)
    journal.append([bar(number) for number in range(60)], stamp=stamp(), state={"latch": 59})
    waiting = [message.payload for message in journal.pending(100)]
    journal.close()
    with sqlite3.connect(file) as db:
        db.execute("DROP TABLE finding")
    db.close()
    told: list[tuple[Path, str]] = []

    def opened() -> Journal:
        return Journal(file, keep_damaged=1, on_set_aside=lambda path, reason: told.append((path, reason)))

    with _largest_file(60_000):
        journal = opened()
        ((held, said),) = told
        assert held.name.endswith("-unsent")
        assert "nothing could be taken over" in said
        assert journal.append([alert()], stamp=stamp())[0] > 60  # recording goes on
        journal.close()
        for _ in range(2):
            _spoil(file)
            journal = opened()
            journal.close()
    fresh = {path for path, _ in told if not path.name.endswith("-unsent")}
    assert len(fresh) == 2
    assert [path for path, _ in told if path not in fresh] == [held] * 3  # said at each start, and still there
    assert held in _asides(file)
    journal = opened()
    assert [message.payload for message in journal.pending(100)][:60] == waiting
    assert journal.state("latch") == 59
    assert told[-1][0].name == held.name.removesuffix("-unsent")
    assert "taken over: 60 unsent records" in told[-1][1]
    journal.close()
    number = len(told)
    opened().close()
    assert len(told) == number


def test_what_waits_aside_is_counted_and_taken_over_without_a_new_start(file: Path, monkeypatch: pytest.MonkeyPatch):
    """A disk too full for the unsent records: number and size of the files that hold them are known, and once there is
    room the running station takes them over; not sooner than a minute after the last try.
    """
    journal = Journal(file)
    journal.append([bar(number) for number in range(60)], stamp=stamp())
    waiting = [message.payload for message in journal.pending(100)]
    journal.close()
    with sqlite3.connect(file) as db:
        db.execute("DROP TABLE finding")
    db.close()
    told: list[tuple[Path, str]] = []
    with _largest_file(60_000):
        journal = Journal(file, on_set_aside=lambda path, reason: told.append((path, reason)))
        (held,) = _asides(file)
        status = journal.status()
        assert status.aside == 1
        assert status.aside_bytes >= held.stat().st_size > 60_000
        monkeypatch.setattr("edgewatch.record.journal.TAKE_OVER_S", 0.0)
        journal._take_over_s = 0.0
        assert journal.status().aside == 1  # tried again in vain
        assert len(told) == 1  # and not told again
        monkeypatch.undo()
        journal._take_over_s = time.monotonic() + 60.0
    assert journal.status().aside == 1
    journal._take_over_s = time.monotonic()
    status = journal.status()
    assert (status.aside, status.aside_bytes, status.unsent) == (0, 0, 60)
    assert [message.payload for message in journal.pending(100)] == waiting
    assert "taken over: 60 unsent records" in told[-1][1]
    journal.close()


def test_a_kill_between_setting_aside_and_taking_over_loses_nothing(file: Path):
    """The next start finds the file by its name, takes over once, and keeps what it has itself."""
    journal = Journal(file)
    journal.append([bar(1), bar(2)], stamp=stamp(), state={"latch": "old", "order": "kept"})
    journal.close()
    file.replace(f"{file}.damaged-20260101T000000Z-unsent")
    journal = Journal(file)
    assert [message.seq for message in journal.pending(10)] == [1, 2]
    journal.append([bar(3)], stamp=stamp(), state={"latch": "new"})
    journal.close()
    assert [path.name for path in _asides(file)] == [f"{file.name}.damaged-20260101T000000Z"]
    journal = Journal(file)
    assert [row.payload["bar"] for row in journal.rows("bar")] == [1, 2, 3]
    assert journal.state("latch") == "new"
    assert journal.state("order") == "kept"
    journal.close()
