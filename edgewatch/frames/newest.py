"""Newest frames win: a reader thread between a live source and the judging."""

from __future__ import annotations

import collections
import dataclasses
import threading
import time

from edgewatch.errors import DeviceError, StalledError
from edgewatch.frames.values import Frame, Source, SourceInfo

DEPTH = 4
"""Frames that may wait. One would shed frames at every hiccup of the scheduler although the judging keeps up; four are
40 ms at 100 frames a second."""

_POLL_S = 0.5
"""How often the reader looks whether it should stop while its source is silent (s)."""

_FAREWELL_S = 2.0
"""Longest wait for the reader at ``close`` (s); a driver that does not return in time is left to the daemon thread."""


class Newest:
    """A live source that never makes the judging wait, and never lets frames pile up. See ``Source``.

    Frames wait in a short queue. When it is full, all that wait are shed and counted in ``Frame.skipped`` of the next:
    so the judging is never further behind than the queue, is at once up to date after a hiccup, and under lasting
    overload sees runs of consecutive frames with gaps between, which keeps glowing bursts from being counted twice.

    ``lasting``: the source comes back by itself when it is lost (``Reopening``), so its ``DeviceError`` are handed on
    and it is read on; opening it anew, which may take seconds, then holds nobody up.
    """

    def __init__(self, source: Source, *, depth: int = DEPTH, lasting: bool = False) -> None:
        """Take over ``source`` and start reading it. Raises ``ValueError`` if ``depth`` < 1."""
        if depth < 1:
            raise ValueError(f"depth = {depth}: at least 1")
        self._source, self._depth, self._lasting = source, depth, lasting
        self._changed = threading.Condition()
        self._waiting: collections.deque[Frame] = collections.deque()
        self._shed = 0
        self._ended = False
        self._failure: Exception | None = None
        self._passing: DeviceError | None = None
        self._closing = False
        self._thread = threading.Thread(target=self._run, name="frames", daemon=True)
        self._thread.start()

    @property
    def info(self) -> SourceInfo:
        """What was opened."""
        return self._source.info

    def read(self, timeout_s: float) -> Frame | None:
        """Return the oldest waiting frame, ``None`` at the end of the source or after ``close``.

        Raises ``StalledError`` if none came within ``timeout_s``, ``DeviceError`` (once all waiting frames are handed
        on) when the source is lost or its reader died. Unless the source is lasting, it is then at its end.
        """
        give_up_s = time.monotonic() + timeout_s
        with self._changed:
            while not self._waiting:
                passing, self._passing = self._passing, None
                if passing is not None and not self._closing:
                    raise passing
                if self._failure is not None:
                    raise self._lost(self._failure) from self._failure
                if self._ended or self._closing:
                    return None
                left_s = give_up_s - time.monotonic()
                if left_s <= 0 or not self._changed.wait(left_s):
                    raise StalledError(f"{self.info.uri}: no picture for {timeout_s:g} s")
            return self._waiting.popleft()

    def close(self) -> None:
        """Stop the reader and let go of the source."""
        with self._changed:
            self._closing = True
            self._changed.notify_all()
        self._source.close()
        if self._thread is not threading.current_thread():
            self._thread.join(_FAREWELL_S)

    def _lost(self, failure: Exception) -> DeviceError:
        if isinstance(failure, DeviceError):
            return DeviceError(str(failure))
        return DeviceError(f"{self.info.uri}: its reader died: {type(failure).__name__}: {failure}")

    def _run(self) -> None:
        """Read until told to stop. Whatever goes wrong is kept for the caller: a thread's exception has no hearer."""
        failure: Exception | None = None
        try:
            while not self._closing:
                try:
                    frame = self._source.read(_POLL_S)
                except StalledError:
                    continue  # how long is too long is for the caller to say
                except DeviceError as error:
                    if not self._lasting:
                        raise
                    with self._changed:
                        self._passing = error
                        self._changed.notify_all()
                    continue
                if frame is None:
                    break
                self._queue(frame)
        except Exception as error:  # noqa: BLE001
            failure = error
        with self._changed:
            self._ended, self._failure = True, None if self._closing else failure
            self._changed.notify_all()

    def _queue(self, frame: Frame) -> None:
        with self._changed:
            self._shed += frame.skipped
            if len(self._waiting) >= self._depth:
                self._shed += sum(1 + waiting.skipped for waiting in self._waiting)
                self._waiting.clear()
            if self._shed != frame.skipped:
                frame = dataclasses.replace(frame, skipped=self._shed)
            self._shed = 0
            self._waiting.append(frame)
            self._changed.notify()
