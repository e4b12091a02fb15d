"""A running station keeps its secrets: not in the process list, the log, a message, the journal or the evidence."""

from __future__ import annotations

import contextlib
import os
import signal
import subprocess
from collections.abc import Iterator
from pathlib import Path

import pytest

from tests.brokers import Broker, Reader, running, wait_until
from tests.station.mill import OPTICS
from tests.station.pictures import quiet_pictures
from tests.station.test_faults import watching, write_station

pytestmark = pytest.mark.slow

SECRET = "swordfish-4711"


def process_list(process: subprocess.Popen[str]) -> str:
    """What any user of the machine sees of the process and all that it has started: the command lines."""
    found = ""
    waiting = [process.pid]
    while waiting:
        pid = waiting.pop()
        with contextlib.suppress(OSError):  # it may have ended meanwhile
            found += Path(f"/proc/{pid}/cmdline").read_text(errors="replace").replace("\0", " ") + "\n"
            for task in Path(f"/proc/{pid}/task").iterdir():
                waiting += map(int, (task / "children").read_text().split())
    return found


def written(folder: Path) -> Iterator[tuple[Path, bytes]]:
    """Every file that the station wrote."""
    for path in folder.rglob("*"):
        if path.is_file() and path.name not in ("password", "station.toml"):
            yield path, path.read_bytes()


@pytest.mark.parametrize("password", [SECRET, f"{SECRET}-wrong"], ids=["right", "wrong"])
def test_the_password_shows_nowhere(tmp_path: Path, password: str) -> None:
    """Right: it publishes. Wrong: it says that the broker refuses. Neither says what it tried."""
    place = tmp_path / "station"
    place.mkdir()
    (place / "password").write_text(f"{password}\n")
    (place / "password").chmod(0o600)
    broker = Broker(tmp_path / "broker", passwords={"wheel-a": SECRET, "reader": "r"})
    fifo = place / "pictures"
    mqtt = {
        "enabled": True,
        "host": "127.0.0.1",
        "port": broker.port,
        "user": "wheel-a",
        "password_file": "password",
    }
    os.mkfifo(fifo)
    with running(broker), quiet_pictures(fifo, fps=OPTICS["fps"]):
        reader = Reader(broker, "#", "-u", "reader", "-P", "r")
        write_station(place, broker, {"uri": f"pipe:{fifo.name}"}, mqtt=mqtt)
        station = watching(place, "--pace", "real")
        try:
            if password == SECRET:
                wait_until(lambda: any(one.topic.endswith("/summary") for one in reader.seen), "it publishes")
            else:
                wait_until(lambda: _journal_says(place, b"broker_refuses"), "the refusal is on the journal")
            shown = process_list(station)
            assert "edgewatch watch" in shown
        finally:
            station.send_signal(signal.SIGTERM)
            out, err = station.communicate(timeout=60)
        seen = list(reader.seen)
        reader.stop()
    messages = [f"{one.topic} {one.payload}" for one in seen]
    assert (len(messages) > 0) == (password == SECRET)
    assert SECRET not in "\n".join([shown, out, err, *messages])
    files = dict(written(place))
    assert any(path.name == "edgewatch.sqlite" for path in files)
    assert [path for path, content in files.items() if SECRET.encode() in content] == []


def _journal_says(folder: Path, words: bytes) -> bool:
    return any(words in content for _, content in written(folder))
