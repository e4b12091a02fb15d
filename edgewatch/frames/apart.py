"""A rehearsal drawn in a process of its own, so that drawing and judging have a core each.

A program started afresh, not a fork: the station has threads. It shares nothing with us but three pipes, so nothing of
it can be left behind: without a reader it ends, whatever happened to us.
"""

from __future__ import annotations

import contextlib
import os
import pickle
import signal
import subprocess
import sys
import threading
import time
import weakref

import numpy as np
from numpy.typing import NDArray

from edgewatch.errors import DeviceError, StalledError
from edgewatch.frames.blocks import Blocks
from edgewatch.frames.renderer import INDEX, count_frames, plan_line
from edgewatch.settings import Settings

START_S = 60.0
"""Longest wait for the first picture: the program imports for half a second on a desk, for several on a busy board."""
END_S = 5.0
"""Longest wait for a process that has ended or has been killed."""
_PROGRAM = """
import pickle, sys
sys.path[:] = pickle.load(sys.stdin.buffer)
from edgewatch.frames.renderer import main
main()
"""
"""It finds the package where we found it, however we were started."""
_OURS = (signal.SIGINT, signal.SIGTERM, signal.SIGHUP)
"""Signals that a terminal or the service manager sends to us and our children alike: we end in good order, reading on
until then, and the program with us."""
_ONE_THREAD = dict.fromkeys(("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"), "1")


class RendererApart:
    """The pictures that ``Renderer`` would draw, from a process of its own. One thread takes; any may ``close``."""

    def __init__(self, settings: Settings) -> None:
        """Start the program and wait for its first picture. Raises ``DeviceError`` when none comes."""
        optics = settings.source_optics()
        self._shape = (optics.height_px, optics.width_px)
        self._count = count_frames(plan_line(settings)[0], optics.fps)
        self._next = 0
        self._said = b""
        self._ending = threading.Lock()
        try:
            self._process, pictures, self._errors = _start(settings)
        except OSError as error:
            raise DeviceError(
                f"rehearsal: the program that draws it cannot be started: {error.strerror or error}"
            ) from error
        self._blocks = Blocks(pictures, INDEX.size + optics.width_px * optics.height_px)
        self._end = weakref.finalize(self, _end, self._process, self._blocks, self._errors)
        if not self._blocks.wait(START_S):
            self.close()
            raise DeviceError(f"rehearsal: the program that draws it has drawn nothing for {START_S:g} s")

    @property
    def pid(self) -> int:
        """Of the program."""
        return self._process.pid

    def take(self, timeout_s: float) -> tuple[int, NDArray[np.uint8]] | None:
        """Return the next picture with its index, ``None`` at the end of the line or after ``close``.

        Raises ``StalledError`` if none comes within ``timeout_s``, ``DeviceError`` when the program has died.
        """
        give_up_s = time.monotonic() + timeout_s
        while self._next < self._count:
            try:
                block = self._blocks.read(give_up_s - time.monotonic())
            except TimeoutError:
                raise StalledError(f"rehearsal: no picture for {timeout_s:g} s") from None
            except (EOFError, OSError):
                block = None
            if block is None:
                self._tell_loss()
                return None
            (index,) = INDEX.unpack_from(block.data)
            if index >= self._next:
                self._next = index + 1
                return index, block[INDEX.size :].reshape(self._shape)
        return None

    def go_on_from(self, index: int) -> None:
        """Pass over the pictures before ``index``: those drawn already are dropped, the others are not drawn."""
        self._next = max(self._next, index)
        assert self._process.stdin is not None
        with contextlib.suppress(OSError, ValueError):  # it has died, or we have closed: the next ``take`` tells
            self._process.stdin.write(INDEX.pack(index))

    def close(self) -> None:
        """End the program; a waiting ``take`` returns."""
        self._blocks.close()
        with self._ending:
            self._end()

    def _tell_loss(self) -> None:
        """Raise ``DeviceError`` saying how the program ended, unless we have ended it."""
        with self._ending:
            if self._blocks.closed:
                return
            try:
                status = self._process.wait(END_S)
            except subprocess.TimeoutExpired:
                self._process.kill()
                status = self._process.wait()
            with contextlib.suppress(BlockingIOError):
                self._said += os.read(self._errors, 1 << 16)
        how = f"was killed by {signal.Signals(-status).name}" if status < 0 else f"ended with status {status}"
        last = self._said.decode(errors="replace").strip().rpartition("\n")[2][:300]
        cause = subprocess.CalledProcessError(status, "edgewatch.frames.renderer", stderr=self._said)
        raise DeviceError(
            f"rehearsal: the program that draws it {how} before picture {self._next} of {self._count}"
            + (f": {last}" if last else "")
        ) from cause


def _start(settings: Settings) -> tuple[subprocess.Popen[bytes], int, int]:
    """Start the program; returns it, the pictures it writes, and what it says on stderr."""
    pictures, to_us = os.pipe()
    errors, complaints = os.pipe()
    os.set_blocking(errors, False)
    os.set_blocking(complaints, False)  # what nobody reads must not hold it up
    blocked = signal.pthread_sigmask(signal.SIG_BLOCK, _OURS)  # inherited, from its first instruction on
    try:
        process = subprocess.Popen(
            [sys.executable, "-c", _PROGRAM],
            stdin=subprocess.PIPE,
            stdout=to_us,
            stderr=complaints,
            bufsize=0,
            env={**os.environ, **_ONE_THREAD},
        )
    except BaseException:
        os.close(pictures)
        os.close(errors)
        raise
    finally:
        signal.pthread_sigmask(signal.SIG_SETMASK, blocked)
        os.close(to_us)
        os.close(complaints)
    assert process.stdin is not None
    with contextlib.suppress(BrokenPipeError):  # died at once: the first picture will be missed
        process.stdin.write(pickle.dumps(list(sys.path)) + pickle.dumps(settings))
    os.set_blocking(process.stdin.fileno(), False)  # an order that finds no room is not worth a wait
    return process, pictures, errors


def _end(process: subprocess.Popen[bytes], blocks: Blocks, errors: int) -> None:
    """Let go of everything; it holds nothing that a kill could harm."""
    blocks.close()
    process.kill()
    assert process.stdin is not None
    with contextlib.suppress(OSError):
        process.stdin.close()
    with contextlib.suppress(subprocess.TimeoutExpired):
        process.wait(END_S)
    os.close(errors)
