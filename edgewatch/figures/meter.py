"""Frames in, contacts out: one object that finds contacts and keeps the tallies of windows and bars.

The station and the commands that read clips use this same object, so a clip and a live camera are measured alike.
"""

from __future__ import annotations

import math
from collections import deque
from dataclasses import dataclass

from edgewatch.figures.contact import Begin, ContactFinder, End
from edgewatch.figures.tally import Tally
from edgewatch.figures.values import Figures
from edgewatch.settings import FigureSettings
from edgewatch.sight.detections import Detections
from edgewatch.sight.optics import Optics


@dataclass(frozen=True, slots=True, kw_only=True)
class WindowDone:
    """One window of the contact under way. The bar's own figures so far: ``BarMeter.bar_so_far``; nothing that a
    decision waits for needs them.
    """

    window: Figures


@dataclass(frozen=True, slots=True, kw_only=True)
class BarDone:
    """A contact has ended. ``bar``: figures of the whole contact; ``windows``: of each window, which add up to it."""

    begin_s: float
    end_s: float
    reason: str
    bar: Figures
    windows: tuple[Figures, ...]


_Waiting = tuple[Detections | None, float, int]
"""Detections (``None``: a picture shown again, which tells nothing new), time (s), frames skipped before."""


class BarMeter:
    """Takes every frame; says when a contact begins, when a window of it is full, and when it has ended.

    Frames of the time in which a contact was not yet known to have begun are added to it afterwards; frames after its
    last sparks are not. The last window of a contact may be shorter
    than ``window_s``.
    """

    def __init__(self, settings: FigureSettings, optics: Optics) -> None:
        self._settings = settings
        self._optics = optics
        self._finder = ContactFinder(settings, optics.fps)
        self._before: deque[_Waiting] = deque()
        self._held: deque[_Waiting] = deque()
        self._start()

    def _start(self) -> None:
        self._bar = Tally(self._optics)
        self._window = Tally(self._optics)
        self._windows: list[Figures] = []
        self._window_begin_s = math.nan
        self._skipped = 0  # before pictures shown again
        self._held.clear()

    @property
    def in_contact(self) -> bool:
        """Whether a bar touches the wheel."""
        return self._finder.in_contact

    @property
    def begin_s(self) -> float:
        """Begin of the contact under way (s), NaN without one."""
        return self._finder.begin_s

    def bar_so_far(self) -> Figures:
        """Figures of the contact under way, up to its last full window."""
        return self._bar.figures()

    def update(
        self, detections: Detections, *, t_s: float, skipped: int = 0, again: bool = False
    ) -> list[Begin | WindowDone | BarDone]:
        """Take one frame at ``t_s`` (s). ``again``: its picture is the one before, shown again: the contact goes on,
        and nothing is counted. Its track would be, its bursts would not, so a good bar would look like a foreign one.
        """
        streaks = len(detections.streaks)
        said = self._finder.update(t_s, streaks)
        frame = (None if again else detections, t_s, skipped)
        if isinstance(said, End):
            self._before.clear()
            return self._finish(said)
        if isinstance(said, Begin):
            self._start()
            self._window_begin_s = said.t_s
            self._before.append(frame)
            found: list[Begin | WindowDone | BarDone] = [said]
            for earlier in self._before:
                if earlier[1] >= said.t_s:
                    found += self._take(earlier)
            self._before.clear()
            return found
        if not self._finder.in_contact:
            self._before.append(frame)
            while self._before[0][1] < t_s - 2.0 * self._settings.begin_s:
                self._before.popleft()
            return []
        self._held.append(frame)
        found = []
        while self._held and self._held[0][1] <= self._finder.last_spark_s:  # the rest only if sparks follow
            found += self._take(self._held.popleft())
        return found

    def _take(self, frame: _Waiting) -> list[Begin | WindowDone | BarDone]:
        detections, t_s, skipped = frame
        done: list[Begin | WindowDone | BarDone] = []
        if self._is_full(t_s):  # frames are missing: none came that could end the window in time
            done += self._end_window(t_s)
        self._skipped += skipped
        if detections is not None:
            self._window.add(detections, t_s=t_s, skipped=self._skipped)
            self._skipped = 0
        next_s = t_s + self._optics.period_s
        if self._is_full(next_s):  # with its last frame, not with the first of the next: a decision is a period earlier
            done += self._end_window(next_s)
        return done

    def _is_full(self, t_s: float) -> bool:
        """Whether a frame at ``t_s`` belongs to a later window."""
        return t_s - self._window_begin_s >= self._settings.window_s - 0.5 * self._optics.period_s

    def _end_window(self, next_s: float) -> list[Begin | WindowDone | BarDone]:
        """End the window; the next one is that in which ``next_s`` lies. One without a frame is not told."""
        spans = math.floor((next_s - self._window_begin_s) / self._settings.window_s + 1e-6)
        self._window_begin_s += max(1, spans) * self._settings.window_s
        if not self._window.frames_seen:
            return []
        window = self._window.figures()
        self._bar.merge(self._window)
        self._window.reset()
        self._windows.append(window)
        return [WindowDone(window=window)]

    def _finish(self, end: End) -> list[Begin | WindowDone | BarDone]:
        done = self._end_window(end.t_s)
        bar = BarDone(
            begin_s=end.begin_s,
            end_s=end.t_s,
            reason=end.reason,
            bar=self._bar.figures(),
            windows=tuple(self._windows),
        )
        self._start()
        return [*done, bar]

    def close(self, t_s: float) -> list[Begin | WindowDone | BarDone]:
        """The source has ended: finish the contact under way."""
        end = self._finder.close(t_s)
        return self._finish(end) if end else []
