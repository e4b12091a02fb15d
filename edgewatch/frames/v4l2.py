"""Controls of a V4L2 device, by ioctl: manual exposure and gain, set and read back.

OpenCV reaches only part of them and does not tell what the driver made of a value, so the device is asked directly; a
second open file is enough for that (V4L2 specification, "Opening and closing devices"). Numbers are those of
linux/videodev2.h and linux/v4l2-controls.h.
"""

from __future__ import annotations

import contextlib
import fcntl
import os
import struct
from collections.abc import Callable
from dataclasses import dataclass

AUTOGAIN = 0x00980912
EXPOSURE = 0x00980911
GAIN = 0x00980913
EXPOSURE_AUTO = 0x009A0901
EXPOSURE_ABSOLUTE = 0x009A0902
EXPOSURE_AUTO_PRIORITY = 0x009A0903
ANALOGUE_GAIN = 0x009E0903
MANUAL = 1
"""V4L2_EXPOSURE_MANUAL."""

_CONTROL, _QUERY = struct.Struct("=Ii"), struct.Struct("=II32siiiiI8x")
_DISABLED, _READ_ONLY = 0x0001, 0x0004


def _iowr(number: int, size: int) -> int:
    """_IOWR('V', number, size) of asm-generic/ioctl.h."""
    return 3 << 30 | size << 16 | ord("V") << 8 | number


GET, SET, QUERY = _iowr(27, _CONTROL.size), _iowr(28, _CONTROL.size), _iowr(36, _QUERY.size)

Ioctl = Callable[[int, int, bytearray], object]


@dataclass(frozen=True, slots=True, kw_only=True)
class Range:
    """What a control takes."""

    low: int
    high: int
    step: int


class Controls:
    """The controls of one device."""

    def __init__(self, path: str, *, ioctl: Ioctl = fcntl.ioctl) -> None:
        """Open ``path`` beside whoever streams from it. Raises ``OSError``."""
        self._ioctl = ioctl
        self._fd = os.open(path, os.O_RDWR | os.O_NONBLOCK | os.O_CLOEXEC)

    def query(self, control: int) -> Range | None:
        """What the control takes; ``None`` if the device has no such control or it cannot be set."""
        words = bytearray(_QUERY.size)
        _QUERY.pack_into(words, 0, control, 0, b"", 0, 0, 0, 0, 0)
        try:
            self._ioctl(self._fd, QUERY, words)
        except OSError:
            return None
        _, _, _, low, high, step, _, flags = _QUERY.unpack(words)
        return None if flags & (_DISABLED | _READ_ONLY) else Range(low=low, high=high, step=max(1, step))

    def set(self, control: int, value: int) -> int | None:
        """Ask for ``value``, within the control's limits; return what the driver says it took, ``None`` without it."""
        limits = self.query(control)
        if limits is None:
            return None
        words = bytearray(_CONTROL.pack(control, min(max(value, limits.low), limits.high)))
        with contextlib.suppress(OSError):  # busy or out of range: what is in force is read back below
            self._ioctl(self._fd, SET, words)
        words = bytearray(_CONTROL.pack(control, 0))
        try:
            self._ioctl(self._fd, GET, words)
        except OSError:
            return None
        return int(_CONTROL.unpack(words)[1])

    def close(self) -> None:
        """Let go of the device."""
        os.close(self._fd)
