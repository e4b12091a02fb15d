"""What happens to the whole station when power, broker or camera go, with real processes."""

from __future__ import annotations

import json
import os
import random
import signal
import subprocess
import sys
import threading
from pathlib import Path
from typing import Any

import pytest

from tests.brokers import Broker, Reader, running, wait_until
from tests.station.mill import OPTICS, SIZE, edgewatch, lines, toml
from tests.station.pictures import quiet_pictures

pytestmark = pytest.mark.slow

LONG_S = 90.0
"""Longest wait for what takes a few seconds on an idle machine."""
EVERYTHING = ("bars", "windows", "alerts", "orders", "conditions", "expected", "relay", "thinned")


def write_station(folder: Path, broker: Broker, source: dict[str, Any], **more: dict[str, Any]) -> None:
    """A station that judges nothing and records everything."""
    (folder / "station.toml").write_text(
        toml(
            {
                "station": {"site": "hollowmere", "line": "peel-2", "name": "wheel-a"},
                "source": {**SIZE, **source},
                "optics": OPTICS,
                "mqtt": {"enabled": True, "host": "127.0.0.1", "port": broker.port},
                **more,
            }
        )
    )


def watching(folder: Path, *words: str) -> subprocess.Popen[str]:
    """A station in a process of its own."""
    return subprocess.Popen(
        [sys.executable, "-m", "edgewatch", "watch", "--json", *words],
        cwd=folder,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        env={**os.environ, "PYTHONPATH": str(Path(__file__).parents[2])},
    )


def test_kills_at_any_moment_lose_nothing_and_leave_no_gap(tmp_path: Path) -> None:
    """SIGKILL again and again while bars are judged: every record of the journal reached the reader, once by seq."""
    rng = random.Random(11)
    broker = Broker(tmp_path / "broker", persistence=True)
    with running(broker):
        write_station(
            tmp_path,
            broker,
            {"uri": "rehearsal:"},
            rehearsal={"bars": 100, "foreign": 0, "contact_s": 0.3, "pause_s": 0.3, "grade": "C45"},
        )
        reader = Reader(broker, session="reader").ready(broker)
        for _ in range(5):
            station = watching(tmp_path)
            assert station.stdout is not None
            station.stdout.readline()  # the first bar has been judged
            threading.Event().wait(rng.uniform(0.0, 1.0))  # the moment of the kill is random on purpose
            station.send_signal(signal.SIGKILL)
            station.communicate()
        station = watching(tmp_path)
        assert station.stdout is not None
        station.stdout.readline()
        station.send_signal(signal.SIGTERM)
        _, errors = station.communicate(timeout=60)
        assert station.returncode == 0, errors
        rows = lines(edgewatch("journal", *EVERYTHING, "--json", folder=tmp_path))
        wait_until(lambda: len(set(reader.seqs())) >= len(rows), "everything to arrive")
        reader.stop()
    seqs = [row["seq"] for row in rows]
    assert seqs == list(range(seqs[0], seqs[0] + len(seqs)))
    received = {m.payload["seq"]: m.payload for m in reader.seen if "seq" in m.payload}
    assert sorted(received) == seqs
    bars = [row["bar"] for row in rows if row["schema"]["name"] == "edgewatch.bar"]
    assert bars == sorted(set(bars))
    for row in rows:
        assert received[row["seq"]] == {key: value for key, value in row.items() if key in received[row["seq"]]}


def test_a_grabber_that_dies_is_named_and_comes_back(tmp_path: Path) -> None:
    """The FIFO's writer goes away: camera_lost, no traceback; another writer comes: good again."""
    fifo = tmp_path / "grabber"
    os.mkfifo(fifo)
    broker = Broker(tmp_path / "broker")
    with running(broker):
        write_station(tmp_path, broker, {"uri": f"pipe:{fifo}", "stall_s": 5.0})
        reader = Reader(broker).ready(broker)
        station = watching(tmp_path, "--pace", "real")

        def causes() -> set[str]:
            found = reader.on("condition")
            return {cause["cause"] for cause in found[-1].payload["causes"]} if found else {"nothing yet"}

        with quiet_pictures(fifo, fps=OPTICS["fps"]):
            wait_until(lambda: not causes() & {"nothing yet", "camera_lost", "stalled"}, "the first pictures")
        wait_until(lambda: causes() & {"camera_lost", "stalled"}, "the loss to be named")
        with quiet_pictures(fifo, fps=OPTICS["fps"]):
            wait_until(lambda: not causes() & {"camera_lost", "stalled"}, "the pictures to be back")
            station.send_signal(signal.SIGTERM)
            _, errors = station.communicate(timeout=60)
        reader.stop()
    assert station.returncode == 0, errors
    assert "Traceback" not in errors
    states = [
        m.payload["state"] for m in reader.on("alert") if m.payload["alert"].startswith(("camera_lost", "stalled"))
    ]
    assert states[0] == "raised" and states[-1] == "cleared"


def test_a_broker_that_is_away_gets_everything_afterwards(tmp_path: Path) -> None:
    """Killed while bars are judged, started again: in order, without a gap; the condition told of it."""
    broker = Broker(tmp_path / "broker", persistence=True)
    with running(broker):
        write_station(
            tmp_path,
            broker,
            {"uri": "rehearsal:"},
            rehearsal={"bars": 400, "foreign": 0, "contact_s": 0.3, "pause_s": 0.3, "grade": "C45"},
        )
        reader = Reader(broker, session="reader").ready(broker)
        station = watching(tmp_path)  # the line waits for the judging: at its own pace a busy machine misses bars
        try:
            assert station.stdout is not None
            for _ in range(2):
                json.loads(station.stdout.readline())
            wait_until(lambda: len(reader.on("bar")) >= 2, "two bars")
            broker.stop(kill=True)
            for _ in range(3):
                last = json.loads(station.stdout.readline())["bar"]  # judging goes on
            broker.start()
            # Not at the end of the line: what has not gone by then waits for the next start, and both ends come back
            # after a pause that has grown meanwhile.
            wait_until(lambda: any(m.payload["bar"] == last for m in reader.on("bar")), "the last bar", LONG_S)
            station.send_signal(signal.SIGTERM)
            _, errors = station.communicate(timeout=120)
        finally:
            station.kill()
        assert station.returncode == 0, errors
        rows = lines(edgewatch("journal", *EVERYTHING, "--json", folder=tmp_path))
        wait_until(lambda: set(reader.seqs()) >= {row["seq"] for row in rows}, "everything to arrive")
        reader.stop()
    bars = [row["bar"] for row in rows if row["schema"]["name"] == "edgewatch.bar"]
    assert bars == list(range(1, len(bars) + 1)) and bars[-1] >= last
    conditions = [row for row in rows if row["schema"]["name"] == "edgewatch.condition"]
    assert any(cause["cause"] == "broker_lost" for row in conditions for cause in row["causes"])
