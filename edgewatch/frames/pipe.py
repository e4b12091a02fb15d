"""Pipes: raw frames from stdin or a FIFO, so that any grabber program can feed the station.

A pipe carries nothing but pixels: size and layout come from the configuration, time is ``index / optics.fps``.
"""

from __future__ import annotations

import contextlib
import fcntl
import os
import select
import stat
import threading
import time

import numpy as np

from edgewatch.errors import DeviceError, StalledError
from edgewatch.frames.values import Frame, Source, SourceInfo
from edgewatch.settings import Settings

PIPE_BYTES = 1024 * 1024
"""Kernel buffer asked for; Linux's limit for users without privilege (pipe(7), /proc/sys/fs/pipe-max-size)."""


def open_pipe(rest: str, settings: Settings, live: bool = True) -> Source:
    """Open stdin (``-``), a FIFO, or a file of raw frames; does not wait for a writer.

    ``live``: the writer cannot wait (a camera's grabber), so the newest frame should win; otherwise it waits for us
    and nothing is skipped. A plain file is never live. Raises ``DeviceError``.
    """
    source, optics = settings.source, settings.optics
    name = "stdin" if rest == "-" else rest
    fd = _open(rest)
    mode = os.fstat(fd).st_mode
    if stat.S_ISDIR(mode) or os.isatty(fd):
        os.close(fd)
        kind = "a folder" if stat.S_ISDIR(mode) else "a terminal"
        raise DeviceError(f"pipe {name}: is {kind}; feed it raw {source.pixel_format} frames")
    info = SourceInfo(
        uri=f"pipe:{rest}",
        width_px=source.width_px,
        height_px=source.height_px,
        fps=optics.fps,
        live=live and not stat.S_ISREG(mode),
    )
    return RawPipe(
        fd, info, pixel_format=source.pixel_format, reopens=info.live and stat.S_ISFIFO(mode) and rest != "-"
    )


def _open(rest: str) -> int:
    try:
        if rest == "-":
            return os.dup(0)  # ours to close; stdin itself stays
        return os.open(rest, os.O_RDONLY | os.O_NONBLOCK | os.O_CLOEXEC)
    except (OSError, ValueError) as error:
        what = getattr(error, "strerror", None) or str(error)
        raise DeviceError(f"pipe {rest}: cannot be opened: {what}; make it with 'mkfifo'") from error


def frame_bytes(width_px: int, height_px: int, pixel_format: str) -> int:
    """Bytes of one raw frame: ``gray8`` or ``yuv420p`` (chroma planes halved and rounded up, as FFmpeg lays them)."""
    luminance = width_px * height_px
    if pixel_format == "gray8":
        return luminance
    if pixel_format == "yuv420p":
        return luminance + 2 * ((width_px + 1) // 2) * ((height_px + 1) // 2)
    raise ValueError(f"pixel_format = {pixel_format!r}: gray8 or yuv420p")


class RawPipe:
    """Raw frames from a file descriptor, which it takes over. See ``Source``."""

    def __init__(self, fd: int, info: SourceInfo, *, pixel_format: str = "gray8", reopens: bool = False) -> None:
        """``reopens``: when the writer goes, the source is lost and can be opened anew, rather than at its end."""
        self._info = info
        self._fd, self._reopens = fd, reopens
        self._size = frame_bytes(info.width_px, info.height_px, pixel_format)
        self._buffer = np.empty(self._size, dtype=np.uint8)
        self._filled = 0
        self._index = 0
        self._reading = threading.Lock()
        self._closing = False
        self._wake_read, self._wake_write = os.pipe()
        with contextlib.suppress(OSError):  # not a pipe, or a limit below ours: only slower
            fcntl.fcntl(fd, fcntl.F_SETPIPE_SZ, PIPE_BYTES)
        self._poll = select.poll()
        self._poll.register(fd, select.POLLIN)
        self._poll.register(self._wake_read, select.POLLIN)

    @property
    def info(self) -> SourceInfo:
        """What was opened."""
        return self._info

    def read(self, timeout_s: float) -> Frame | None:
        """Return the next frame, ``None`` when the writer is done after a whole frame, or after ``close``.

        Raises ``StalledError`` if the frame is not complete within ``timeout_s`` (what came is kept for the next call)
        and ``DeviceError`` if the data end within a frame, or the writer of a live FIFO goes.
        """
        give_up_s = time.monotonic() + timeout_s
        with self._reading:
            while self._filled < self._size:
                if not self._wait(give_up_s - time.monotonic()):
                    if self._closing:
                        return None
                    raise StalledError(
                        f"{self._info.uri}: no whole frame within {timeout_s:g} s "
                        f"({self._filled} of {self._size} bytes have come)"
                    )
                if not self._take():
                    self._end()
                    return None
            return self._cut_frame()

    def close(self) -> None:
        """Wake a waiting reader and let go of the descriptor."""
        if not self._closing:
            self._closing = True
            os.write(self._wake_write, b"x")
            with self._reading:
                for fd in (self._fd, self._wake_read, self._wake_write):
                    os.close(fd)

    def _wait(self, seconds: float) -> bool:
        """Whether there is something to read, or the writer has gone, within ``seconds``."""
        if self._closing:
            return False
        ready = self._poll.poll(max(0.0, seconds) * 1000.0)
        return not self._closing and any(fd == self._fd for fd, _ in ready)

    def _take(self) -> bool:
        """Read what is there; whether anything came."""
        try:
            count = os.readv(self._fd, [memoryview(self._buffer.data)[self._filled :]])
        except BlockingIOError:  # another reader of the same FIFO was faster
            return True
        except OSError as error:
            raise DeviceError(f"{self._info.uri}: cannot be read: {error.strerror or error}") from error
        self._filled += count
        return count > 0

    def _cut_frame(self) -> Frame:
        info = self._info
        pixels = info.width_px * info.height_px
        picture = self._buffer[:pixels].reshape(info.height_px, info.width_px)
        self._buffer, self._filled = np.empty(self._size, dtype=np.uint8), 0
        frame = Frame(picture=picture, index=self._index, t_s=self._index / info.fps)
        self._index += 1
        return frame

    def _end(self) -> None:
        info, left = self._info, self._filled
        self._filled = 0
        if left:
            raise DeviceError(
                f"{info.uri}: ended within frame {self._index}, after {left} of {self._size} bytes: cut short, or "
                f"source.width_px x source.height_px = {info.width_px} x {info.height_px} px is not what is written"
            )
        if self._reopens:
            raise DeviceError(f"{info.uri}: its writer has gone")
