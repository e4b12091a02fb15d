"""What sources and relay cost: ``python -m tests.bench.bench_ports``. Seeded; ratios are of the same run.

Decoding of a lossless clip through our luminance path against OpenCV's BGR path; a raw pipe; the newest-frame reader
under overload; time from the wanted level to its proof on a relay board behind a pty.
"""

from __future__ import annotations

import platform
import queue
import random
import statistics
import subprocess
import sys
import tempfile
import threading
import time
from collections.abc import Callable, Iterator
from pathlib import Path

import cv2
import numpy as np
from numpy.typing import NDArray

from edgewatch.frames.newest import Newest
from edgewatch.frames.quiet import hush
from edgewatch.frames.registry import open_source
from edgewatch.frames.values import Frame, SourceInfo
from edgewatch.relay.keeper import RelayKeeper, RelayReport
from edgewatch.relay.port import open_relay
from edgewatch.settings import RelaySettings, Settings
from edgewatch.wire.relayframes import write_coil
from tests.clips import write_clip
from tests.relay.boards import Board

FRAMES, HEIGHT, WIDTH = 600, 400, 640
SWITCHES = 300


def dark_pictures() -> Iterator[NDArray[np.uint8]]:
    """Dark frames with read noise, as a camera sees between bars: the least that a codec can make of a frame."""
    rng = np.random.default_rng(7)
    pool = [np.clip(rng.normal(9.0, 1.6, (HEIGHT, WIDTH)), 0, 255).astype(np.uint8) for _ in range(20)]
    for index in range(FRAMES):
        yield pool[index % 20]


def ms_per_frame(work: Callable[[], int]) -> float:
    """Best of three runs."""
    best = float("inf")
    for _ in range(3):
        begin_s = time.perf_counter()
        count = work()
        best = min(best, (time.perf_counter() - begin_s) * 1000.0 / count)
    return best


def ours(uri: str) -> int:
    """Read a whole source."""
    source = open_source(uri, Settings(), live=False)
    count = 0
    while source.read(10.0) is not None:
        count += 1
    source.close()
    return count


def theirs(path: Path) -> int:
    """OpenCV's usual way: BGR, then grey."""
    capture = cv2.VideoCapture(str(path), cv2.CAP_FFMPEG)
    count = 0
    while True:
        found, picture = capture.read()
        if not found:
            return count
        cv2.cvtColor(picture, cv2.COLOR_BGR2GRAY)
        count += 1


def bench_sources(folder: Path) -> None:
    """A line a kind of source."""
    kinds = {
        "ffv1 grey": ("a.mkv", ("-c:v", "ffv1", "-pix_fmt", "gray")),
        "h264 lossless yuv420p": ("b.mkv", ("-c:v", "libx264", "-qp", "0", "-pix_fmt", "yuv420p")),
        "mjpeg": ("c.avi", ("-c:v", "mjpeg", "-q:v", "2", "-pix_fmt", "yuvj420p")),
    }
    for name, (file, options) in kinds.items():
        path = write_clip(folder / file, dark_pictures(), options=options)
        mine, usual = ms_per_frame(lambda p=path: ours(f"clip:{p}")), ms_per_frame(lambda p=path: theirs(p))
        print(f"{name:<24} {mine:6.2f} ms a frame; OpenCV's BGR path {usual:6.2f} ms, ratio {mine / usual:.2f}")
    raw = folder / "raw"
    raw.write_bytes(b"".join(picture.tobytes() for picture in dark_pictures()))
    mine = ms_per_frame(lambda: ours(f"pipe:{raw}"))
    print(f"{'raw gray8 file':<24} {mine:6.3f} ms a frame")
    program = (
        "import sys, dataclasses, time\nfrom edgewatch.frames.registry import open_source\n"
        "from edgewatch.settings import Settings\n"
        "source = open_source('pipe:-', Settings(), live=False)\nn = 0\nb = time.perf_counter()\n"
        "while source.read(10) is not None: n += 1\nprint((time.perf_counter() - b) * 1000 / n)"
    )
    with raw.open("rb") as content:
        feeder = subprocess.Popen(["cat"], stdin=content, stdout=subprocess.PIPE)
        done = subprocess.run([sys.executable, "-c", program], stdin=feeder.stdout, capture_output=True, check=True)
        assert feeder.stdout is not None
        feeder.stdout.close()
        feeder.wait()
    print(f"{'raw gray8 pipe (cat)':<24} {float(done.stdout):6.3f} ms a frame")


class Camera:
    """Delivers a frame every ``period_s``, and knows when."""

    def __init__(self, period_s: float) -> None:
        self.info = SourceInfo(uri="bench:", width_px=WIDTH, height_px=HEIGHT, fps=1 / period_s, live=True)
        self._period_s, self._index, self._begin_s = period_s, 0, time.monotonic()
        self._picture = next(dark_pictures())

    def read(self, timeout_s: float) -> Frame | None:
        """Wait for the next exposure."""
        due_s = self._begin_s + self._index * self._period_s
        time.sleep(max(0.0, due_s - time.monotonic()))  # a camera delivers by the clock
        self._index += 1
        return Frame(picture=self._picture, index=self._index - 1, t_s=due_s)

    def close(self) -> None:
        """Nothing to do."""


def bench_newest() -> None:
    """How far behind the judging is, by load: share of the frame period that judging takes."""
    for load in (0.5, 0.9, 1.5, 3.0):
        source = Newest(Camera(0.005))
        behind, seen, skipped = [], 0, 0
        for _ in range(round(600 / max(1.0, load))):
            frame = source.read(5.0)
            assert frame is not None
            behind.append((time.monotonic() - frame.t_s) * 1000.0)
            seen, skipped = seen + 1, skipped + frame.skipped
            time.sleep(0.005 * load)
        source.close()
        behind.sort()
        share = skipped / (seen + skipped)
        print(
            f"newest, 200 frames/s, judging {load:3.1f} periods: behind median {statistics.median(behind):5.1f} ms, "
            f"p99 {behind[int(0.99 * len(behind))]:5.1f} ms, skipped {100 * share:4.1f} %"
        )


def bench_relay() -> None:
    """From ``set`` to the report that the level is proved, Modbus coil write with its echo and read-back."""
    on, off = write_coil(1, 0, True), write_coil(1, 0, False)
    frames = Board({on: True, off: False}, lambda request: [(0.0, request)])
    settings = RelaySettings(
        kind="frames", port=frames.port, baud=115200, on_frame=on, off_frame=off, on_answer=on, off_answer=off
    )
    reports: queue.Queue[RelayReport] = queue.Queue()
    keeper = RelayKeeper(lambda: open_relay(settings), reports.put, chance=random.Random(1).random)
    stop = threading.Event()
    thread = threading.Thread(target=keeper.run, args=(stop,))
    thread.start()
    rng = random.Random(2)
    times = []
    for number in range(SWITCHES):
        keeper.set(bool(number % 2), f"switch {number}")
        times.append(reports.get(timeout=5.0).seconds * 1000.0)
        time.sleep(rng.uniform(0.0, 0.01))
    stop.set()
    thread.join()
    frames.pull()
    times.sort()
    print(
        f"relay, byte frames over a pty, {SWITCHES} switches to proof: median {statistics.median(times):.2f} ms, "
        f"p99 {times[int(0.99 * SWITCHES)]:.2f} ms"
    )


def main() -> None:
    """Print the table."""
    hush()
    print(
        f"{platform.machine()}, {platform.system()} {platform.release()}, Python {platform.python_version()}, "
        f"OpenCV {cv2.__version__}, numpy {np.__version__}; {WIDTH} x {HEIGHT} px"
    )
    with tempfile.TemporaryDirectory() as folder:
        bench_sources(Path(folder))
    bench_newest()
    bench_relay()


if __name__ == "__main__":
    main()
