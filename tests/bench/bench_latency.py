"""From the deciding frame to the subscriber and to the relay, and how far the judging falls behind.

    .venv/bin/python -m tests.bench.bench_latency [--bars 200] [--folder DIR]

The real ``edgewatch watch --pace real`` reads 640 x 400 pictures at 100 frames/s from a FIFO, judges against the
example bands, keeps journal and evidence in ``--folder`` (its disk is part of what is measured), publishes to a real
Mosquitto and switches a byte-frame board behind a pty. Every bar is foreign. The pictures were simulated beforehand and
lie in memory.

A frame has arrived when its last byte is in the pipe. The deciding frame is the last one of the window at whose end the
bar is called nonconforming. The message is the ``alert``, at QoS 1, when ``mosquitto_sub`` has handed it on; the relay
has been reached when the board has the whole frame of bytes. ``behind`` is the time from a frame's arrival until it
is judged and its effects are handed on. Exit status 1 when an aim is missed.
"""

from __future__ import annotations

import argparse
import json
import os
import platform
import signal
import subprocess
import sys
import tempfile
import time
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import cv2
import numpy as np

from edgewatch.commands import cli
from edgewatch.frames.registry import open_source
from edgewatch.monitor.effects import Effect, SetRelay
from edgewatch.monitor.monitor import Monitor
from edgewatch.record.tomlfile import read_toml
from edgewatch.settings import read_settings
from edgewatch.sight.frame import Frame
from edgewatch.wire.messages import Stamp
from tests.brokers import Broker, Reader, Seen, running, wait_until
from tests.relay.boards import board
from tests.station.mill import toml
from tests.station.pictures import grabbing

TOP = Path(__file__).parents[2]
FPS = 100
BARS_IN_MEMORY = 8
CONTACT_S, PAUSE_S = 0.7, 0.4
ON, OFF = bytes.fromhex("A00101A2"), bytes.fromhex("A00100A1")
AIM_SUBSCRIBER_MS, AIM_RELAY_MS = 50.0, 20.0
ASIDE = 3
"""The first bars are left out: caches are cold and the background is being learnt."""


class Timed(Reader):
    """Notes when each message came (monotonic, s)."""

    def __init__(self, broker: Broker) -> None:
        self.came: list[tuple[float, Seen]] = []
        super().__init__(broker)

    def take(self, message: Seen) -> None:
        """Keep one message with its time."""
        self.came.append((time.monotonic(), message))
        super().take(message)


def make_pictures(seed: int) -> list[bytes]:
    """Foreign bars before the example camera."""
    data = read_toml(TOP / "calib" / "optics.toml")
    line = {"grade": "C80", "bars": BARS_IN_MEMORY, "foreign": 0, "contact_s": CONTACT_S, "pause_s": PAUSE_S}
    source = open_source(
        "rehearsal:", read_settings({**data, "rehearsal": {**line, "seed": seed}}, file="b"), live=False
    )
    pictures = []
    while (frame := source.read(1.0)) is not None:
        pictures.append(frame.picture.tobytes())
    return pictures


def watch_and_note(log: Path, words: list[str]) -> int:
    """The station's process: the command itself, with a note of when each frame had been judged."""
    judged: list[tuple[int, float, int, bool]] = []
    see = Monitor.see

    def noting(self: Monitor, frame: Frame, stamp: Stamp) -> list[Effect]:
        effects = see(self, frame, stamp)
        stops = any(isinstance(effect, SetRelay) and effect.stop for effect in effects)
        judged.append((frame.index, time.monotonic(), frame.skipped, stops))
        return effects

    Monitor.see = noting  # type: ignore[method-assign]
    status = cli.main(words)
    log.write_text(json.dumps(judged))
    return status


def settings_text(fifo: Path, broker: Broker, port: str) -> str:
    """The station file."""
    data: dict[str, Any] = read_toml(TOP / "calib" / "optics.toml")
    data["source"]["uri"] = f"pipe:{fifo}"
    data["judge"] = {"bands": str(TOP / "calib" / "bands"), "expect": "C45"}
    data["mqtt"] = {"enabled": True, "host": "127.0.0.1", "port": broker.port}
    answers = {"on_frame": ON.hex(), "off_frame": OFF.hex(), "on_answer": ON.hex(), "off_answer": OFF.hex()}
    data["relay"] = {"kind": "frames", "port": port, "latch": False, **answers}
    return toml(data)


def run(folder: Path, bars: int, pictures: list[bytes]) -> Mapping[str, list[float]]:
    """Run the station until so many bars have been judged; the times found, in ms."""
    fifo, log = folder / "grabber", folder / "judged.json"
    os.mkfifo(fifo)
    switched: list[tuple[float, bytes]] = []

    def answer(request: bytes) -> list[tuple[float, bytes]]:
        switched.append((time.monotonic(), request))
        return [(0.0, request)]

    broker = Broker(folder / "broker", lines=("set_tcp_nodelay true",))
    with running(broker), board({ON: True, OFF: False}, answer) as relay:
        reader = Timed(broker)
        reader.ready(broker)
        (folder / "station.toml").write_text(settings_text(fifo, broker, relay.port))
        station = subprocess.Popen(
            [
                sys.executable,
                "-m",
                "tests.bench.bench_latency",
                "--station",
                str(log),
                "watch",
                "--pace",
                "real",
                "--json",
            ],
            cwd=folder,
            stdout=subprocess.DEVNULL,
            env={**os.environ, "PYTHONPATH": str(TOP)},
        )
        wait_until(lambda: reader.on("presence"), "the station to start")
        with grabbing(fifo, pictures, fps=FPS) as grabber:
            seconds = (bars + ASIDE + 1) * len(pictures) / FPS / BARS_IN_MEMORY
            grabber.await_frames(round(seconds * FPS))
            station.send_signal(signal.SIGTERM)
            station.wait(60)
            written_s = list(grabber.written_s)
        reader.stop()
    if station.returncode:
        sys.exit(f"the station ended with status {station.returncode}")
    return evaluate(written_s, json.loads(log.read_text()), reader.came, switched)


def evaluate(
    written_s: list[float],
    judged: list[tuple[int, float, int, bool]],
    came: list[tuple[float, Seen]],
    switched: list[tuple[float, bytes]],
) -> Mapping[str, list[float]]:
    """Put the four records together; times in ms."""
    skipped = sum(row[2] for row in judged)
    found: dict[str, list[float]] = {
        "behind": [1e3 * (at_s - written_s[index]) for index, at_s, _, _ in judged[ASIDE * FPS :]],
        "skipped": [skipped / (skipped + len(judged))],
    }
    stops = [(index, at_s) for index, at_s, _, stop in judged if stop]
    raised = {
        m.payload["bar"]: at_s
        for at_s, m in came
        if m.topic.endswith("/alert")
        and m.payload["alert"].startswith("nonconforming_bar")
        and m.payload["state"] == "raised"
    }
    for _, message in came:
        if not message.topic.endswith("/bar"):
            continue
        one = message.payload
        if one["bar"] <= ASIDE or one["verdict"] != "nonconforming" or one["bar"] not in raised:
            continue
        end_s = one["begin_s"] + one["decided_after_s"]  # of the deciding window
        last = round(end_s * FPS) - 1
        fell = [(index, at_s) for index, at_s in stops if last <= index <= last + 30]
        if not fell:
            continue
        _, at_s = fell[0]
        arrived_s = written_s[last]
        relay_s = next(time_s for time_s, request in switched if request == OFF and time_s >= arrived_s)
        for name, value in (
            ("to the decision", 1e3 * (at_s - arrived_s)),
            ("to the relay", 1e3 * (relay_s - arrived_s)),
            ("to the subscriber", 1e3 * (raised[one["bar"]] - arrived_s)),
        ):
            found.setdefault(name, []).append(value)
    return found


def main() -> int:
    """Print the figures."""
    if sys.argv[1:2] == ["--station"]:
        return watch_and_note(Path(sys.argv[2]), sys.argv[3:])
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--bars", type=int, default=200)
    parser.add_argument("--seed", type=int, default=41)
    parser.add_argument("--folder", help="where the station writes (default: the folder for temporary files)")
    args = parser.parse_args()
    pictures = make_pictures(args.seed)
    load = os.getloadavg()[0]
    with tempfile.TemporaryDirectory(dir=args.folder) as name:
        found = run(Path(name), args.bars, pictures)
    print(
        f"{platform.machine()}, {os.cpu_count()} cores, load {load:.1f} before and {os.getloadavg()[0]:.1f} at the end,"
    )
    print(f"Python {platform.python_version()}, OpenCV {cv2.__version__}, numpy {np.__version__}, {FPS} frames/s")
    print(f"frames skipped: {100.0 * float(np.mean(found.pop('skipped'))):.2f} %")
    print(f"{'ms':32} {'number':>7} {'median':>8} {'99 %':>8} {'most':>8}")
    for what, values in found.items():
        middle, high = np.percentile(values, [50, 99])
        print(f"{what:32} {len(values):7d} {middle:8.1f} {high:8.1f} {max(values):8.1f}")
    if "to the relay" not in found:
        print("no bar was judged: too many frames were skipped; this machine does not follow 100 frames/s now")
        return 1
    missed = [
        f"{what}: aim {aim:g} ms missed"
        for what, aim in (("to the subscriber", AIM_SUBSCRIBER_MS), ("to the relay", AIM_RELAY_MS))
        if np.percentile(found[what], 99) > aim
    ]
    print("\n".join(missed) or "aims held at the median and at the 99th percentile")
    return 1 if missed else 0


if __name__ == "__main__":
    sys.exit(main())
