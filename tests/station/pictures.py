"""A grabber for the tests: dark pictures with noise into a FIFO, at a camera's rate, until told to stop."""

from __future__ import annotations

import contextlib
import threading
import time
from collections.abc import Iterator
from pathlib import Path

import numpy as np

from tests.station.mill import SIZE


@contextlib.contextmanager
def quiet_pictures(fifo: Path, *, fps: float) -> Iterator[None]:
    """Write pictures in the background while the block runs."""
    stop = threading.Event()
    rng = np.random.default_rng(1)
    shape = (SIZE["height_px"], SIZE["width_px"])
    pictures = [np.clip(rng.normal(10, 1.5, shape), 0, 255).astype(np.uint8).tobytes() for _ in range(32)]

    def work() -> None:
        with contextlib.suppress(BrokenPipeError), fifo.open("wb") as pipe:
            due_s = time.monotonic()
            index = 0
            while not stop.is_set():
                pipe.write(pictures[index % len(pictures)])
                pipe.flush()
                index += 1
                due_s += 1.0 / fps
                stop.wait(max(0.0, due_s - time.monotonic()))

    writer = threading.Thread(target=work, daemon=True)
    writer.start()
    try:
        yield
    finally:
        stop.set()
        writer.join(10.0)
        assert not writer.is_alive()
