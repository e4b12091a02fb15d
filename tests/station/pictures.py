"""A grabber for the tests: pictures into a FIFO at a camera's rate until told to stop."""

from __future__ import annotations

import contextlib
import os
import threading
import time
from collections.abc import Iterator, Sequence
from io import RawIOBase
from pathlib import Path

import numpy as np

from tests.station.mill import SIZE


class Grabber:
    """Writes ``pictures`` (raw bytes) over and over, one every ``1 / fps`` s by the clock: it never waits for the
    station longer than the pipe makes it. When the station lets go of the FIFO it is opened anew. While ``unplugged``
    is set there is no writer.
    """

    def __init__(self, fifo: Path, pictures: Sequence[bytes], *, fps: float) -> None:
        self.unplugged = threading.Event()
        self.written_s: list[float] = []
        """When the last byte of each frame was in the pipe (monotonic, s)."""
        self._fifo, self._pictures, self._fps = fifo, pictures, fps
        self._stop = threading.Event()
        self._change = threading.Condition()
        self._thread = threading.Thread(target=self._run, daemon=True)
        self._thread.start()

    def _run(self) -> None:
        while not self._stop.is_set():
            with contextlib.suppress(OSError):  # nobody reads yet, or no longer
                fd = os.open(self._fifo, os.O_WRONLY | os.O_NONBLOCK)
                os.set_blocking(fd, True)
                with os.fdopen(fd, "wb", buffering=0) as pipe:
                    self._write(pipe)
            self._stop.wait(0.01)  # nothing tells that there is a reader

    def _write(self, pipe: RawIOBase) -> None:
        due_s = time.monotonic()
        while not self._stop.is_set() and not self.unplugged.is_set():
            rest = memoryview(self._pictures[len(self.written_s) % len(self._pictures)])
            while rest:
                rest = rest[pipe.write(rest) or 0 :]
            with self._change:
                self.written_s.append(time.monotonic())
                self._change.notify_all()
            due_s += 1.0 / self._fps
            self._stop.wait(max(0.0, due_s - time.monotonic()))

    def await_frames(self, more: int) -> None:
        """Wait until ``more`` frames have been written from now on, or the grabber has ended."""
        with self._change:
            until = len(self.written_s) + more
            while len(self.written_s) < until and self._thread.is_alive():
                self._change.wait(0.1)

    def stop(self) -> None:
        """End it; the station must still read, or have gone."""
        self._stop.set()
        self._thread.join(10.0)
        assert not self._thread.is_alive()


@contextlib.contextmanager
def grabbing(fifo: Path, pictures: Sequence[bytes], *, fps: float) -> Iterator[Grabber]:
    """Write ``pictures`` in the background while the block runs."""
    grabber = Grabber(fifo, pictures, fps=fps)
    try:
        yield grabber
    finally:
        grabber.stop()


@contextlib.contextmanager
def quiet_pictures(fifo: Path, *, fps: float) -> Iterator[None]:
    """Write dark pictures with noise in the background while the block runs."""
    rng = np.random.default_rng(1)
    shape = (SIZE["height_px"], SIZE["width_px"])
    pictures = [np.clip(rng.normal(10, 1.5, shape), 0, 255).astype(np.uint8).tobytes() for _ in range(32)]
    with grabbing(fifo, pictures, fps=fps):
        yield
