"""The station's clocks: boot, monotonic time, UTC, and whether UTC is synchronised."""

from __future__ import annotations

import ctypes
import ctypes.util
import time
import uuid
from pathlib import Path

from edgewatch.wire.messages import Stamp

_BOOT_ID = Path("/proc/sys/kernel/random/boot_id")
_TIME_ERROR = 5
"""adjtimex(2): the clock is not synchronised."""
_TIMEX_BYTES = 512
"""More than ``struct timex`` takes on any Linux; with ``modes`` zero the call only reads."""


def read_boot_id() -> str:
    """Identify this boot of the machine; without Linux's own, of this process."""
    try:
        return _BOOT_ID.read_text(encoding="ascii").strip()
    except OSError:
        return str(uuid.uuid4())


class Clock:
    """Gives stamps. The kernel is asked for synchronisation at most once a second."""

    def __init__(self) -> None:
        self._boot = read_boot_id()
        library = ctypes.util.find_library("c")
        self._libc = ctypes.CDLL(library) if library else None
        self._asked_s = -10.0
        self._synced = False

    @property
    def synced(self) -> bool:
        """Whether the kernel holds its clock for synchronised (adjtimex(2))."""
        now = time.monotonic()
        if now - self._asked_s >= 1.0:
            self._asked_s = now
            self._synced = self._ask()
        return self._synced

    def _ask(self) -> bool:
        if self._libc is None or not hasattr(self._libc, "adjtimex"):
            return False
        state = self._libc.adjtimex(ctypes.create_string_buffer(_TIMEX_BYTES))
        return bool(0 <= state != _TIME_ERROR)

    def now(self) -> Stamp:
        """A stamp of this moment."""
        return Stamp(boot=self._boot, monotonic_s=time.monotonic(), utc_s=time.time(), synced=self.synced)
