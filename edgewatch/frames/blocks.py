"""Blocks of one size from a pipe: time-outs that keep what has come, and a reader that can be let go."""

from __future__ import annotations

import contextlib
import fcntl
import os
import select
import threading
import time
from typing import Any

import numpy as np
from numpy.typing import NDArray

PIPE_BYTES = 1024 * 1024
"""Kernel buffer asked for; Linux's limit for users without privilege (pipe(7), /proc/sys/fs/pipe-max-size)."""


class Blocks:
    """Blocks of ``size`` bytes from a file descriptor, which it takes over. One thread reads; any may ``close``."""

    def __init__(self, fd: int, size: int) -> None:
        self.size = size
        self._fd = fd
        self._buffer = np.empty(size, dtype=np.uint8)
        self._filled = 0
        self._reading = threading.Lock()
        self._closing = threading.Lock()
        self._closed = False
        self._wake_read, self._wake_write = os.pipe()
        with contextlib.suppress(OSError):  # not a pipe, or a limit below ours: only slower
            fcntl.fcntl(fd, fcntl.F_SETPIPE_SZ, PIPE_BYTES)
        self._poll = select.poll()
        self._poll.register(fd, select.POLLIN)
        self._poll.register(self._wake_read, select.POLLIN)

    @property
    def filled(self) -> int:
        """Bytes of the next block that have come."""
        return self._filled

    @property
    def closed(self) -> bool:
        """Whether ``close`` was called."""
        return self._closed

    def wait(self, timeout_s: float) -> bool:
        """Whether there is something to read, or the writer has gone, within ``timeout_s``."""
        with self._reading:
            return self._wait(timeout_s)

    def read(self, timeout_s: float) -> NDArray[np.uint8] | None:
        """Return the next block, an array of its own; ``None`` when the writer has gone, or after ``close``.

        Raises ``TimeoutError`` if the block is not whole within ``timeout_s`` (what came is kept for the next call),
        ``EOFError``, once, if the writer has gone within a block, whose bytes are dropped, and ``OSError`` of the
        descriptor.
        """
        give_up_s = time.monotonic() + timeout_s
        with self._reading:
            while self._filled < self.size:
                if not self._wait(give_up_s - time.monotonic()):
                    if self._closed:
                        return None
                    raise TimeoutError
                if not self._take():
                    left, self._filled = self._filled, 0
                    if left:
                        raise EOFError(f"{left} of {self.size} bytes")
                    return None
            whole: NDArray[Any] = self._buffer
            self._buffer, self._filled = np.empty(self.size, dtype=np.uint8), 0
            return whole

    def close(self) -> None:
        """Wake a waiting reader and let go of the descriptor."""
        with self._closing:
            if self._closed:
                return
            self._closed = True
        os.write(self._wake_write, b"x")
        with self._reading:
            for fd in (self._fd, self._wake_read, self._wake_write):
                os.close(fd)

    def _wait(self, seconds: float) -> bool:
        if self._closed:
            return False
        ready = self._poll.poll(max(0.0, seconds) * 1000.0)
        return not self._closed and any(fd == self._fd for fd, _ in ready)

    def _take(self) -> bool:
        """Read what is there; whether anything came."""
        try:
            count = os.readv(self._fd, [memoryview(self._buffer.data)[self._filled :]])
        except BlockingIOError:  # another reader of the same FIFO was faster
            return True
        self._filled += count
        return count > 0
