"""``FILE.seq``: a number that no record has passed, kept outside the journal, and the lock against a second writer."""

from __future__ import annotations

import contextlib
import fcntl
import os
import zlib
from pathlib import Path

from edgewatch.errors import DeviceError

_SLOT_BYTES = 32
"""Each of the two slots lies within one sector, so a power cut can spoil one of them at most."""
_MOST = 2**62
"""Above this a number in the file is nonsense: SQLite's own numbers end at 2**63 - 1."""


class Ceiling:
    """The highest ``seq`` that may have been used, in two slots written in turn, synced before the numbers are used.

    ``top`` is 0 when nothing is known. Raises ``DeviceError``: the file cannot be made, or another process holds it.
    """

    def __init__(self, path: Path) -> None:
        self._path = path
        self.top = 0
        self._next_slot = 0
        try:
            self._file = os.open(path, os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, 0o644)
        except OSError as error:
            raise DeviceError(f"journal: {path} cannot be opened: {error.strerror or error}") from error
        try:
            fcntl.flock(self._file, fcntl.LOCK_EX | fcntl.LOCK_NB)
            tops = [_read(os.pread(self._file, _SLOT_BYTES, slot * _SLOT_BYTES)) for slot in (0, 1)]
        except BlockingIOError as error:
            self.close()
            raise DeviceError(f"journal: {path} is held by another process: one station a journal") from error
        except OSError as error:
            self.close()
            raise DeviceError(f"journal: {path} cannot be read: {error.strerror or error}") from error
        self.top = max(tops)
        self._next_slot = 1 if tops[0] == self.top else 0

    def raise_to(self, top: int) -> None:
        """Make ``top`` durable; it never falls. Raises ``DeviceError`` (disk full, for one), and nothing changes."""
        if top <= self.top:
            return
        try:
            if os.pwrite(self._file, _slot(top), self._next_slot * _SLOT_BYTES) != _SLOT_BYTES:
                raise OSError("written only in part")
            os.fsync(self._file)
        except OSError as error:
            raise DeviceError(f"journal: {self._path} cannot be written: {error.strerror or error}") from error
        self.top = top
        self._next_slot = 1 - self._next_slot

    def close(self) -> None:
        """Let go of the file and the lock; a second call does nothing."""
        file, self._file = self._file, -1
        if file >= 0:
            os.close(file)

    def abandon(self) -> None:
        """Close it, and take it away where it holds nothing yet: no journal came about."""
        if self._file >= 0 and self.top == 0:
            with contextlib.suppress(OSError):
                self._path.unlink()
        self.close()


def _slot(top: int) -> bytes:
    number = b"%020d" % top
    return number + b" %08x\n\n\n" % zlib.crc32(number)


def _read(slot: bytes) -> int:
    """Return the number in one slot, 0 when it is torn or empty."""
    number = slot[:20]
    if len(slot) != _SLOT_BYTES or not number.isdigit() or slot != _slot(int(number)):
        return 0
    return min(int(number), _MOST)
