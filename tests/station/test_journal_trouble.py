"""A running station whose journal is damaged, or fills up while the broker is away: said, as an alert; it goes on."""

from __future__ import annotations

import contextlib
import os
import signal
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

from edgewatch.errors import DeviceError
from edgewatch.record.journal import Journal
from edgewatch.record.reading import read_records
from tests.brokers import Broker, wait_until
from tests.record.entries import bar, stamp
from tests.station.mill import OPTICS
from tests.station.pictures import quiet_pictures
from tests.station.test_faults import watching, write_station

pytestmark = pytest.mark.slow


@pytest.fixture
def place(tmp_path: Path) -> Iterator[Path]:
    """A station's folder with a camera that shows nothing; its broker is away."""
    folder = tmp_path / "station"
    folder.mkdir()
    fifo = folder / "pictures"
    os.mkfifo(fifo)
    away = Broker(tmp_path / "broker")  # never started
    write_station(
        folder, away, {"uri": "pipe:pictures"}, journal={"most_mb": 1.0, "thin_windows_mb": 0.2, "keep_damaged": 2}
    )
    with quiet_pictures(fifo, fps=OPTICS["fps"]):
        yield folder


def alerts(file: Path, cause: str) -> list[dict[str, Any]]:
    """The alerts of this cause on the journal, oldest first; none while it cannot be read."""
    with contextlib.suppress(DeviceError):
        rows = [row.payload for row in read_records(file, ("alert",))]
        return [row for row in rows if str(row["alert"]).startswith(cause)]
    return []


def raised(file: Path, cause: str) -> list[str]:
    """The texts of those raised."""
    return [row["text"] for row in alerts(file, cause) if row["state"] == "raised"]


def test_each_damaged_journal_is_an_alert_and_old_ones_are_deleted(place: Path) -> None:
    """Damaged before the start and three times while it runs: each is said, two files stay, judging never ends."""
    file = place / "edgewatch.sqlite"
    journal = Journal(file)
    journal.append([bar(1)], stamp=stamp())
    journal.close()
    file.write_bytes(file.read_bytes()[:100] + b"\xff" * 6000)
    station = watching(place, "--pace", "real")
    texts: list[str] = []
    try:
        for time in range(4):
            if time:
                (place / "junk").write_bytes(b"\xff" * 6000)
                (place / "junk").replace(file)
            wait_until(lambda: set(raised(file, "journal_damaged")) - set(texts), "the alert is on the new journal")
            texts.extend(raised(file, "journal_damaged")[-1:])
            assert station.poll() is None
    finally:
        station.send_signal(signal.SIGTERM)
        _, errors = station.communicate(timeout=60)
    assert station.returncode == 0, errors
    asides = [path for path in place.glob("*.damaged-*") if not path.name.endswith(("-wal", "-shm"))]
    assert len(asides) == 2
    assert len(texts) == 4
    assert ["deleted to make room" in text for text in texts] == [False, False, True, True]
    assert errors.count("set aside as edgewatch.sqlite.damaged-") == 4
    assert errors.count("deleted to make room: edgewatch.sqlite.damaged-") == 2


def test_records_that_lie_aside_are_an_alert_with_number_and_size(place: Path) -> None:
    """Two damaged journals that cannot be read at all: never deleted; the alert says how many, and ends with them."""
    file = place / "edgewatch.sqlite"
    asides = [Path(f"{file}.damaged-2026010{day}T000000Z-unsent") for day in (1, 2)]
    for aside in asides:
        aside.mkdir()  # opening it fails as it does on a card with a broken sector
    station = watching(place, "--pace", "real")
    try:
        wait_until(lambda: raised(file, "records_aside"), "the alert is on the journal")
    finally:
        station.send_signal(signal.SIGTERM)
        _, errors = station.communicate(timeout=60)
    assert station.returncode == 0, errors
    (text,) = raised(file, "records_aside")
    assert "2 files, 0.0 MB" in text
    assert all(aside.exists() for aside in asides)
    asides[0].rmdir()
    asides[1].rmdir()
    station = watching(place, "--pace", "real")
    try:
        wait_until(lambda: alerts(file, "records_aside")[-1]["state"] == "cleared", "the alert has ended")
    finally:
        station.send_signal(signal.SIGTERM)
        station.communicate(timeout=60)


def test_an_outbox_that_fills_is_said_before_it_is_full(place: Path) -> None:
    """The broker stayed away: 0.9 of 1 MB is unsent. The condition names it, an alert tells how much; all is kept."""
    file = place / "edgewatch.sqlite"
    journal = Journal(file, most_mb=1.0, thin_windows_mb=0.2)
    seqs = journal.append([bar(number) for number in range(800)], stamp=stamp())
    assert journal.status().used_bytes < 1e6
    journal.close()
    station = watching(place, "--pace", "real")
    try:
        wait_until(lambda: raised(file, "outbox_filling"), "the alert is on the journal")
    finally:
        station.send_signal(signal.SIGTERM)
        _, errors = station.communicate(timeout=60)
    assert station.returncode == 0, errors
    (text,) = raised(file, "outbox_filling")
    assert "unsent, 1 MB of 1 MB" in text
    conditions = [row.payload for row in read_records(file, ("condition",))]
    assert "outbox_filling" in [cause["cause"] for cause in conditions[-1]["causes"]]
    assert [row.seq for row in read_records(file, ("bar",)) if row.unsent] == list(seqs)
