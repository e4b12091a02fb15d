"""A station under full load for simulated hours, faster than real time: what grows, and how far judging falls behind.

``python -m tests.bench.bench_soak [--hours H] [--fps F]``: the real ``edgewatch watch`` reads raw pictures from a FIFO
as fast as it judges them, with a real Mosquitto and a reader beside it, a bar every two seconds. Memory, open files,
threads and the journal's size are read from outside, every simulated quarter of an hour; the first hour is the warm-up
that the others are held against. Resident memory is split as the kernel does: *anonymous* is what the station itself
holds, and what a leak would be in; *file* is pages of programs and libraries, which the kernel takes and gives back.

The longest time for which the station took no picture is the longest standstill of its judging: a camera's pictures
would have waited as long (``bench_latency`` has it at a camera's own pace). Exit status 1 when anything has grown by
more than 2 %, or a message is missing.
"""

from __future__ import annotations

import argparse
import os
import platform
import signal
import subprocess
import sys
import tempfile
import threading
import time
from dataclasses import dataclass
from pathlib import Path

import cv2
import numpy as np

from tests.brokers import Broker, Reader, running
from tests.station.mill import toml

WIDTH, HEIGHT = 160, 100
BAR_S, CONTACT_S = 2.0, 1.2
LARGEST_GROWTH = 0.02


def make_pictures(rng: np.random.Generator, fps: float) -> list[bytes]:
    """One minute of a line: a bar every two seconds; pictures never repeat within it."""
    pictures = []
    for index in range(round(60 * fps)):
        picture = np.clip(rng.normal(10.0, 1.5, (HEIGHT, WIDTH)), 0, 255).astype(np.uint8)
        if (index / fps) % BAR_S < CONTACT_S:
            for y in rng.permutation(np.arange(8, HEIGHT - 8, 10))[:7].tolist():
                x = int(rng.integers(25, 110))
                cv2.line(picture, (x, y), (x + 22, y + int(rng.integers(-1, 2))), 90, 2, cv2.LINE_AA)
        pictures.append(picture.tobytes())
    return pictures


@dataclass(frozen=True, kw_only=True)
class Reading:
    """What the process holds at one moment."""

    hours: float
    resident_mb: float
    anonymous_mb: float
    file_mb: float
    files: int
    threads: int
    journal_mb: float
    speed: float


def read(pid: int, folder: Path, *, hours: float, speed: float) -> Reading:
    """Look at a process from outside."""
    status = Path(f"/proc/{pid}/status").read_text()
    value = {line.split(":")[0]: line.split()[1] for line in status.splitlines() if ":" in line and line.split()[1:]}
    size = sum(path.stat().st_size for path in folder.glob("journal.sqlite*"))
    return Reading(
        hours=hours,
        resident_mb=int(value["VmRSS"]) / 1000,
        anonymous_mb=int(value["RssAnon"]) / 1000,
        file_mb=(int(value["RssFile"]) + int(value["RssShmem"])) / 1000,
        files=len(list(Path(f"/proc/{pid}/fd").iterdir())),
        threads=int(value["Threads"]),
        journal_mb=size / 1e6,
        speed=speed,
    )


def soak(folder: Path, hours: float, fps: float) -> tuple[list[Reading], int, list[int], float]:
    """Run it; readings, messages received, the sequence numbers that are missing, the longest standstill (s)."""
    fifo = folder / "grabber"
    os.mkfifo(fifo)
    broker = Broker(folder / "broker")
    pictures = make_pictures(np.random.default_rng(6), fps)
    readings: list[Reading] = []
    longest_s = 0.0
    with running(broker):
        reader = Reader(broker).ready(broker)
        (folder / "station.toml").write_text(
            toml(
                {
                    "source": {"uri": f"pipe:{fifo}", "width_px": WIDTH, "height_px": HEIGHT},
                    "optics": {"mm_per_px": 4.0, "contact_px": [4, 50], "fps": fps, "exposure_ms": 4.0},
                    "journal": {"file": "journal.sqlite", "most_mb": 8.0, "thin_windows_mb": 2.0},
                    "mqtt": {"enabled": True, "host": "127.0.0.1", "port": broker.port},
                }
            )
        )
        station = subprocess.Popen(
            [sys.executable, "-m", "edgewatch", "watch", "--pace", "fast", "--json"],
            cwd=folder,
            stdout=subprocess.DEVNULL,
            env={**os.environ, "PYTHONPATH": str(Path(__file__).parents[2])},
        )
        with fifo.open("wb") as pipe:
            begun = time.monotonic()
            for minute in range(round(hours * 60)):
                for picture in pictures:
                    write_s = time.monotonic()
                    pipe.write(picture)
                    longest_s = max(longest_s, time.monotonic() - write_s) if minute else 0.0
                if (minute + 1) % 15 == 0:
                    simulated_h = (minute + 1) / 60
                    speed = simulated_h * 3600 / (time.monotonic() - begun)
                    readings.append(read(station.pid, folder, hours=simulated_h, speed=speed))
                    print(readings[-1], file=sys.stderr, flush=True)
            station.send_signal(signal.SIGTERM)
        station.wait(120)
        threading.Event().wait(2.0)  # what the broker still hands on; nothing tells that there is no more
        reader.stop()
    seqs = sorted(set(reader.seqs()))
    missing = sorted(set(range(seqs[0], seqs[-1] + 1)) - set(seqs))
    return readings, len(seqs), missing, longest_s


def main() -> int:
    """Print the table."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--hours", type=float, default=24.0)
    parser.add_argument("--fps", type=float, default=20.0)
    args = parser.parse_args()
    print(f"{platform.machine()}, Python {platform.python_version()}, OpenCV {cv2.__version__}, numpy {np.__version__}")
    with tempfile.TemporaryDirectory() as name:
        readings, received, missing, longest_s = soak(Path(name), args.hours, args.fps)
    widths = {"hours": 6, "resident MB": 12, "anonymous": 10, "file": 6, "files": 6, "threads": 8, "journal MB": 11}
    print(" ".join(f"{name:>{width}}" for name, width in {**widths, "times real time": 16}.items()))
    for one in readings[:: max(1, len(readings) // 12)]:
        print(
            f"{one.hours:6.2f} {one.resident_mb:12.1f} {one.anonymous_mb:10.1f} {one.file_mb:6.1f} {one.files:6} "
            f"{one.threads:8} {one.journal_mb:11.2f} {one.speed:16.1f}"
        )
    half = readings[len(readings) // 2 :]
    early, late = readings[min(3, len(readings) - 1)], half[-1]
    growth = {
        "resident memory": late.resident_mb / early.resident_mb - 1,
        "anonymous memory": late.anonymous_mb / early.anonymous_mb - 1,
        "open files": late.files / early.files - 1,
        "threads": late.threads / early.threads - 1,
        "journal": max(one.journal_mb for one in half) / max(one.journal_mb for one in readings[: len(half)]) - 1,
    }
    for what, share in growth.items():
        print(f"{what}: {100 * share:+.2f} % from hour {early.hours:g} to hour {late.hours:g}")
    print(f"longest standstill of the judging: {longest_s:.2f} s")
    print(f"{received} journalled messages received, {len(missing)} missing")
    return 1 if missing or max(growth.values()) > LARGEST_GROWTH else 0


if __name__ == "__main__":
    sys.exit(main())
