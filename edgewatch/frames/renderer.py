"""The pictures of a rehearsal, one after the other, and the program that draws them in a process of its own.

The program is the other end of ``apart``. It reads a pickled ``Settings`` from stdin, then orders of eight bytes: the
index to go on from. It writes blocks to stdout, each the picture's index and its pixels. It ends with the line, and as
soon as nobody reads any more.
"""

from __future__ import annotations

import math
import os
import pickle
import queue
import select
import struct
import sys
import threading

import cv2
import numpy as np
from numpy.typing import NDArray

from edgewatch.rehearsal.camera import CameraModel
from edgewatch.rehearsal.line import Line
from edgewatch.rehearsal.scene import Scene
from edgewatch.settings import Settings

USUAL_SPEED_M_S = 28.0
"""Surface speed where the configuration does not know it."""
INDEX = struct.Struct("<q")
"""What goes before the pixels of a picture, and the whole of an order."""
AHEAD = 16
"""Pictures drawn ahead besides those in the pipe: launching a batch of sparks takes as long as five pictures."""
AHEAD_BYTES = 32 << 20
"""Fewer are drawn ahead where they would take more memory than this."""


def plan_line(settings: Settings) -> tuple[Line, np.random.Generator]:
    """Return the line of ``settings.rehearsal`` and the generator that its pictures are drawn from."""
    own = settings.rehearsal
    plan_rng, scene_rng = (np.random.default_rng(part) for part in np.random.SeedSequence(own.seed).spawn(2))
    line = Line(
        bars=own.bars,
        foreign=own.foreign,
        grade=own.grade,
        foreign_grades=own.foreign_grades,
        contact_s=own.contact_s,
        pause_s=own.pause_s,
        wheel_speed_m_s=max(1.0, settings.wheel.surface_speed_m_s or USUAL_SPEED_M_S),
        rng=plan_rng,
    )
    return line, scene_rng


def count_frames(line: Line, fps: float) -> int:
    """Frames of a line: every one whose exposure begins before the end of it."""
    count = math.ceil(line.end_s * fps)
    while (count - 1) / fps >= line.end_s:
        count -= 1
    while count / fps < line.end_s:
        count += 1
    return count


class Renderer:
    """Draws the pictures when they are asked for, in this process."""

    def __init__(self, settings: Settings) -> None:
        line, rng = plan_line(settings)
        optics = settings.source_optics()
        self._scene = Scene(optics, line.conditions(), camera=CameraModel(hot_pixels=5), rng=rng)
        self._next, self._count = 0, count_frames(line, optics.fps)

    def take(self, timeout_s: float = 0.0) -> tuple[int, NDArray[np.uint8]] | None:
        """Return the next picture with its index, ``None`` at the end of the line. Never waits."""
        if self._next >= self._count:
            return None
        picture, _ = self._scene.frame()
        self._next += 1
        return self._next - 1, picture

    def go_on_from(self, index: int) -> None:
        """Pass over the pictures before ``index``."""
        if index > self._next:
            self._scene.skip(index - self._next)
            self._next = index

    def close(self) -> None:
        """Nothing is held."""


def main() -> None:
    """Draw the line whose settings come on stdin, ahead of the reader as far as ``AHEAD`` allows."""
    settings: Settings = pickle.load(sys.stdin.buffer)
    cv2.setNumThreads(1)  # the other cores are for those who judge
    pictures = os.dup(1)
    os.dup2(2, 1)  # what else would be printed must not get among the pictures
    renderer = Renderer(settings)
    bytes_each = settings.source.width_px * settings.source.height_px
    ahead: queue.Queue[bytes] = queue.Queue(max(1, min(AHEAD, AHEAD_BYTES // bytes_each)))
    sender = threading.Thread(target=_send, args=(pictures, ahead), daemon=True)
    sender.start()
    orders = select.poll()
    orders.register(0, select.POLLIN)
    while True:
        while orders.poll(0):
            order = os.read(0, INDEX.size)
            if not order:
                os._exit(0)  # whom we draw for has gone
            renderer.go_on_from(INDEX.unpack(order)[0])
        taken = renderer.take()
        if taken is None:
            break
        index, picture = taken
        ahead.put(INDEX.pack(index) + picture.tobytes())
    ahead.put(b"")
    sender.join()


def _send(fd: int, ahead: queue.Queue[bytes]) -> None:
    """Write block after block until an empty one; end the process when nobody reads."""
    while block := ahead.get():
        rest = memoryview(block)
        while rest:
            try:
                rest = rest[os.write(fd, rest) :]
            except OSError:
                os._exit(0)
