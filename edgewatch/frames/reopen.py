"""A source that is lost is opened anew, with growing, jittered waits."""

from __future__ import annotations

import dataclasses
import threading
from collections.abc import Callable

from edgewatch.backoff import Backoff
from edgewatch.errors import DeviceError, StalledError
from edgewatch.frames.newest import Newest
from edgewatch.frames.registry import open_source
from edgewatch.frames.values import Frame, Source, SourceInfo
from edgewatch.settings import Settings

LIVE_KINDS = frozenset({"camera", "pipe", "stream"})
"""Kinds of source that may come and go."""


def open_lasting(
    uri: str,
    settings: Settings,
    *,
    clock: Callable[[], float],
    chance: Callable[[], float],
    live: bool = True,
    patient: bool = False,
) -> Source:
    """Open a source as a station needs it: newest frames win, and what is lost comes back, where it is live.

    A clip, and with ``live=False`` a pipe or rehearsal, comes as ``open_source`` gives it. ``patient``: a camera,
    pipe or stream that is not there yet counts as lost instead of raising ``DeviceError``.
    """

    def opener() -> Source:
        return open_source(uri, settings, live=live)

    first: Source | SourceInfo
    try:
        first = opener()
    except DeviceError:
        if not patient or uri.partition(":")[0] not in LIVE_KINDS or not live:
            raise
        first = SourceInfo(
            uri=uri,
            width_px=settings.source.width_px,
            height_px=settings.source.height_px,
            fps=settings.optics.fps,
            live=True,
        )
    if not isinstance(first, SourceInfo) and not first.info.live:
        return first
    return Newest(Reopening(opener, first, clock=clock, chance=chance), lasting=True)


class Reopening:
    """A source that comes back. See ``Source``.

    ``read`` raises ``DeviceError`` when the source is lost and after each attempt to open it that failed, and
    ``StalledError`` while the wait before the next attempt lasts; the caller goes on reading. Indices and times go on
    rising over the gap: an index is used once, a time that would run backwards is moved past the last one by the
    length of the gap.
    """

    def __init__(
        self,
        opener: Callable[[], Source],
        first: Source | SourceInfo,
        *,
        clock: Callable[[], float],
        chance: Callable[[], float],
        first_s: float = 0.25,
        most_s: float = 15.0,
    ) -> None:
        """Take over ``first``, or begin lost, as the ``SourceInfo`` of what is to come.

        ``opener`` raises ``DeviceError`` when it cannot open; ``clock``: monotonic seconds; ``chance``: numbers in
        [0, 1) for the jitter.
        """
        self._opener, self._clock = opener, clock
        self._backoff = Backoff(chance, first_s=first_s, most_s=most_s)
        self._closing = threading.Event()
        self._source = None if isinstance(first, SourceInfo) else first
        self._info = first if isinstance(first, SourceInfo) else first.info
        self._due_s = 0.0
        self._index_offset, self._next_index = 0, 0
        self._time_offset_s, self._last_s, self._last_clock_s = 0.0, float("-inf"), clock()
        self._fresh = False
        self.reopened = 0
        """How often it came back."""

    @property
    def info(self) -> SourceInfo:
        """What was opened last."""
        return self._info

    def read(self, timeout_s: float) -> Frame | None:
        """Return the next frame; ``None`` at the end of the source and after ``close``."""
        source = self._source
        if source is None:
            source = self._open_again(timeout_s)
        if source is None:
            return None
        try:
            frame = source.read(timeout_s)
        except StalledError:
            raise
        except DeviceError:
            self._lose(source)
            raise
        except Exception as error:  # a bug of a driver must not end the seeing: the device is opened anew
            self._lose(source)
            raise DeviceError(f"{self._info.uri}: its reader died: {type(error).__name__}: {error}") from error
        if frame is None:
            return None
        return self._follow_on(frame)

    def close(self) -> None:
        """Let go of the source and stop coming back."""
        self._closing.set()
        source = self._source
        if source is not None:
            source.close()

    def _lose(self, source: Source) -> None:
        source.close()
        self._source = None
        self._due_s = self._clock() + self._backoff.next_s()

    def _open_again(self, timeout_s: float) -> Source | None:
        """Wait until the next attempt is due, at most ``timeout_s``, and make it; ``None`` after ``close``."""
        wait_s = self._due_s - self._clock()
        if wait_s > 0 and self._closing.wait(min(wait_s, timeout_s)):
            return None
        if self._closing.is_set():
            return None
        if wait_s > timeout_s:
            raise StalledError(f"{self._info.uri}: lost; opened anew in {wait_s - timeout_s:.2g} s")
        try:
            source = self._opener()
        except Exception as error:
            self._due_s = self._clock() + self._backoff.next_s()
            if isinstance(error, DeviceError):
                raise
            raise DeviceError(f"{self._info.uri}: cannot be opened: {type(error).__name__}: {error}") from error
        self._source, self._info = source, source.info
        self._index_offset, self._fresh = self._next_index, True
        self.reopened += 1
        if self._closing.is_set():  # closed while the device was being opened
            source.close()
            return None
        return source

    def _follow_on(self, frame: Frame) -> Frame:
        now_s = self._clock()
        if self._fresh:  # the device works again, which opening alone does not show
            self._fresh = False
            self._backoff.reset()
            gap_s = max(now_s - self._last_clock_s, 1e-6)
            behind = frame.t_s <= self._last_s
            self._time_offset_s = self._last_s + gap_s - frame.t_s if behind else 0.0
        if self._index_offset or self._time_offset_s:
            frame = dataclasses.replace(
                frame, index=frame.index + self._index_offset, t_s=frame.t_s + self._time_offset_s
            )
        self._next_index, self._last_s, self._last_clock_s = frame.index + 1, frame.t_s, now_s
        return frame
