"""More frames than can be judged, on a loaded processor: the station sheds frames, says so, and stays right.

The overload is made, not hoped for: while one picture is looked at, others arrive, however fast the machine is.
"""

from __future__ import annotations

import contextlib
import os
import subprocess
import sys
from collections.abc import Iterator, Mapping
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from edgewatch.frames.rehearsal import RehearsalSource
from edgewatch.record.bandfiles import save_band
from edgewatch.rehearsal.line import Bar
from edgewatch.settings import read_settings
from edgewatch.sight.detections import Detections
from edgewatch.sight.sight import Sight
from edgewatch.station.station import Station
from tests.brokers import Broker, Reader, running, wait_until
from tests.monitor.streams import band
from tests.station.mill import OPTICS, SIZE
from tests.station.pictures import grabbing

pytestmark = pytest.mark.slow

FPS = 40
ON_THE_WAY = 40
"""More frames than the pipe and the queue hold: so many may be written that nobody has counted when all ends."""
LONG_S = 120.0
"""Longest wait for bars that take seconds on an idle machine."""


def line_of_three() -> tuple[list[bytes], list[Bar]]:
    """Pictures of two good bars and a foreign one, and what is true of them."""
    source = RehearsalSource(
        read_settings(
            {
                "source": SIZE,
                "optics": {**OPTICS, "fps": FPS, "exposure_ms": 5.0},
                "rehearsal": {
                    **{"grade": "C80", "bars": 3, "foreign": 1, "foreign_grades": ["C15"]},
                    **{"contact_s": 1.2, "pause_s": 0.6, "seed": 31},
                },
            },
            file="test",
        )
    )
    pictures = []
    while (frame := source.read(1.0)) is not None:
        pictures.append(frame.picture.tobytes())
    return pictures, source.bars


@contextlib.contextmanager
def loaded_processor() -> Iterator[None]:
    """A busy process for every core."""
    busy = [subprocess.Popen([sys.executable, "-c", "while True: pass"]) for _ in range(os.cpu_count() or 1)]
    try:
        yield
    finally:
        for process in busy:
            process.kill()
            process.wait()


def test_overload_sheds_frames_says_so_and_stays_right(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Lightly overloaded: bars are judged, rightly. Heavily: ``dropping``, nothing is conforming. Freed: good again."""
    pictures, truth = line_of_three()
    looks = 0
    hold = lambda: 0  # noqa: E731 - exchanged below
    fifo = tmp_path / "grabber"
    os.mkfifo(fifo)
    save_band(tmp_path / "bands" / "C80.toml", band("C80", 1.4, 3.4))
    save_band(tmp_path / "bands" / "C15.toml", band("C15", 0.02, 0.3))

    class SlowSight(Sight):
        """Looks at one picture while others arrive."""

        def look(self, picture: NDArray[np.uint8]) -> Detections:
            nonlocal looks
            looks += 1
            grabber.await_frames(hold())
            return super().look(picture)

    monkeypatch.setattr("edgewatch.monitor.monitor.Sight", SlowSight)
    broker = Broker(tmp_path / "broker")
    with running(broker), ThreadPoolExecutor() as pool:
        reader = Reader(broker).ready(broker)
        station = Station(
            read_settings(
                {
                    "source": {**SIZE, "uri": f"pipe:{fifo}"},
                    "optics": {**OPTICS, "fps": FPS, "exposure_ms": 5.0},
                    "judge": {"bands": "bands", "expect": "C80", "clock_must_sync": False},
                    "mqtt": {"enabled": True, "host": "127.0.0.1", "port": broker.port},
                },
                file="test",
            ),
            tmp_path,
        )

        def bars(after: int = 0) -> list[dict[str, Any]]:
            return [m.payload for m in list(reader.seen) if m.topic.endswith("/bar") and m.payload["seq"] > after]

        def dropping() -> int:
            """Number of the condition in force if it says so, else 0."""
            found = [m.payload for m in list(reader.seen) if m.topic.endswith("/condition") and "seq" in m.payload]
            said = found and any(cause["cause"] == "dropping" for cause in found[-1]["causes"])
            return int(found[-1]["seq"]) if said else 0

        def has_judged(after: int, *, skipping: bool) -> bool:
            """Whether a good bar and a foreign one have got a verdict, with or without frames skipped."""
            judged = [one for one in bars(after) if (one["frames_skipped"] > 0) == skipping]
            return {"conforming", "nonconforming"} <= {one["verdict"] for one in judged}

        with grabbing(fifo, pictures, fps=FPS) as grabber:
            run = pool.submit(station.run)
            try:
                hold = lambda: 5 if looks % 80 == 0 else 0  # noqa: E731 - one more than the queue holds: four are shed
                wait_until(lambda: has_judged(0, skipping=True), "verdicts in spite of skipped frames", LONG_S)
                with loaded_processor():
                    hold = lambda: 3  # noqa: E731
                    wait_until(dropping, "dropping to be said", LONG_S)
                    begun = dropping()
                    wait_until(lambda: len(bars(begun)) >= 3, "bars under overload", LONG_S)
                    shed = bars(begun)
                hold = lambda: 0  # noqa: E731
                wait_until(lambda: not dropping(), "the end of dropping", LONG_S)
                ended = max(m.payload["seq"] for m in reader.on("condition") if "seq" in m.payload)
                wait_until(lambda: has_judged(ended, skipping=False), "verdicts as before", LONG_S)
            finally:
                station.request_stop()
            outcome = run.result(60.0)
            written = len(grabber.written_s)
        reader.stop()

    assert all(one["frames_skipped"] > one["frames_seen"] for one in shed[1:])  # the first began before
    for one in shed:
        assert "dropping" in one["causes"]
        assert one["verdict"] != "conforming"
    seen_whole = {
        which(one, truth, len(pictures)): one for one in bars() if not one["frames_skipped"] and not one["causes"]
    }
    assert len(seen_whole) >= 2
    for one in bars():
        bar = which(one, truth, len(pictures))
        assert one["verdict"] != ("nonconforming" if bar.grade == bar.expected else "conforming")
        whole = seen_whole.get(bar)
        if whole is not None:  # the limits stated for what was left of it hold what all of it shows
            assert one["burst_rate_low_per_m"] <= whole["burst_rate_high_per_m"]
            assert whole["burst_rate_low_per_m"] <= one["burst_rate_high_per_m"]
        parts = [m.payload for m in reader.on("window") if m.payload["bar"] == one["bar"]]
        assert sum(part["frames_skipped"] for part in parts) == one["frames_skipped"]
    assert written - ON_THE_WAY <= outcome.frames + outcome.skipped <= written
    last = reader.on("summary")[-1].payload
    assert (last["frames_seen"], last["frames_skipped"]) == (outcome.frames, outcome.skipped)
    assert outcome.faults == 0


def which(message: Mapping[str, Any], truth: list[Bar], frames: int) -> Bar:
    """The bar that a message is about: the same pictures come again and again."""
    middle_s = (message["begin_s"] + message["end_s"]) / 2 % (frames / FPS)
    (found,) = (bar for bar in truth if bar.begin_s <= middle_s <= bar.end_s)
    return found
