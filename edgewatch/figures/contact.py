"""When a bar touches the wheel: begin and end of contacts, from the number of streaks in each frame."""

from __future__ import annotations

import math
from collections import deque
from dataclasses import dataclass

from edgewatch.settings import FigureSettings


@dataclass(frozen=True, slots=True, kw_only=True)
class Begin:
    """A contact has begun at ``t_s``, the first frame with sparks; it is known only ``begin_s`` later."""

    t_s: float


@dataclass(frozen=True, slots=True, kw_only=True)
class End:
    """A contact has ended: ``t_s`` is the last frame with sparks. ``reason``: ``gap``, ``longest`` or ``closed``."""

    begin_s: float
    t_s: float
    reason: str


TAIL_SHARE = 0.15
"""Sparks fly on for a few tenths of a second after the bar has left the wheel: fewer streaks than this share of the
contact's mean are such a tail, not grinding. Simulated tails begin below a tenth of it."""
TAIL_S = 0.5
"""What counts as a tail decays with this time (s) once the contact has ended, so that a weaker bar is soon seen."""

IDLE_FACTOR = 2.0
"""A contact begins this many times above what is seen between contacts, plus ``least_streaks``: a glowing wheel and lit
haze may look like a few streaks all the time."""
IDLE_S = 0.5
"""Time over which that is averaged (s)."""


class _Span:
    """Frames of the last while, with the sum of their streaks: counts are whole numbers, so the sum never drifts."""

    def __init__(self) -> None:
        self.frames: deque[tuple[float, int]] = deque()
        self.total = 0

    def add(self, t_s: float, streaks: int) -> None:
        self.frames.append((t_s, streaks))
        self.total += streaks

    def keep_from(self, t_s: float) -> None:
        """Let go of frames before this time."""
        frames = self.frames
        while frames and frames[0][0] < t_s:
            self.total -= frames.popleft()[1]

    def keep_after(self, t_s: float) -> None:
        """Let go of frames up to this time."""
        frames = self.frames
        while frames and frames[0][0] <= t_s:
            self.total -= frames.popleft()[1]

    def clear(self) -> None:
        self.frames.clear()
        self.total = 0


class ContactFinder:
    """Finds contacts; one call a frame, in order of time.

    The mean number of streaks over ``begin_s`` begins a contact and over ``gap_s`` ends it, so that a frame or two
    without streaks, skipped frames or single stray streaks do neither; nor does the tail of sparks still in
    flight. Times come from the frames, not from counting them.

    Raises ``ValueError`` on a time that is not finite or on a negative count.
    """

    def __init__(self, settings: FigureSettings, fps: float) -> None:
        if not (math.isfinite(fps) and fps > 0.0):
            raise ValueError(f"fps = {fps!r}: a positive number is needed")
        self._settings = settings
        self._period_s = 1.0 / fps
        self._recent = _Span()  # over which the mean is taken
        self._last = _Span()  # those of them within ``begin_s``
        self._begin_s: float | None = None
        self._last_spark_s = math.nan
        self._last_s = -math.inf
        self._watching_s = math.nan
        self._level = 0.0  # mean streaks a frame of the contact under way, or of the last one
        self._frames = 0
        self._ended_s = -math.inf
        self._idle = 0.0  # mean streaks a frame between contacts

    @property
    def in_contact(self) -> bool:
        """Whether a bar touches the wheel, as far as is known."""
        return self._begin_s is not None

    @property
    def begin_s(self) -> float:
        """Begin of the contact under way (s), NaN without one."""
        return math.nan if self._begin_s is None else self._begin_s

    @property
    def last_spark_s(self) -> float:
        """Last frame of the contact under way that belongs to it for certain (s), NaN without a contact."""
        return self._last_spark_s

    def is_spark(self, streaks: int) -> bool:
        """Whether one frame by itself shows sparks, and not just the tail of a contact."""
        return streaks >= max(1.0, self._least())

    def _least(self) -> float:
        """Streaks a frame that count as sparks now."""
        tail = TAIL_SHARE * self._level
        if self._begin_s is None:
            tail *= math.exp(-max(0.0, self._last_s - self._ended_s) / TAIL_S)
            return max(self._settings.least_streaks + IDLE_FACTOR * self._idle, tail)
        return max(self._settings.least_streaks, tail)

    def update(self, t_s: float, streaks: int) -> Begin | End | None:
        """Take one frame's time (s) and number of streaks; say whether a contact has begun or ended."""
        if not math.isfinite(t_s) or streaks < 0:
            raise ValueError(f"t_s = {t_s!r}, streaks = {streaks!r}: a finite time and a count are needed")
        if t_s <= self._last_s:  # a source that starts again from 0: what was before does not count
            self._clear()
            self._ended_s = -math.inf
        if not self._recent.frames:
            self._watching_s = t_s
        step_s = min(max(t_s - self._last_s, 0.0), IDLE_S)
        self._last_s = t_s
        self._recent.add(t_s, streaks)
        self._last.add(t_s, streaks)
        if self._begin_s is not None:
            return self._look_for_end(t_s, streaks)
        found = self._look_for_begin(t_s)
        if found is None and streaks < max(1.0, self._least()):  # the first sparks of a contact are not idle
            self._idle += (streaks - self._idle) * step_s / IDLE_S
        return found

    def _mean_over(self, span_s: float, t_s: float) -> float:
        """Mean streaks a frame over the last ``span_s``; older frames are let go of."""
        begin_s = t_s - span_s + 0.5 * self._period_s
        self._recent.keep_from(begin_s)
        self._last.keep_from(begin_s)
        return self._recent.total / len(self._recent.frames)

    def _clear(self) -> None:
        self._recent.clear()
        self._last.clear()

    def _look_for_begin(self, t_s: float) -> Begin | None:
        span = max(self._settings.begin_s, self._period_s)
        mean = self._mean_over(span, t_s)
        covered = t_s - self._watching_s + 1.01 * self._period_s >= span  # frames may be skipped: time counts
        if mean < self._least() or not covered:
            return None
        frames = self._recent.frames
        sparks = [at for at, count in frames if count > 0]
        if 2 * len(sparks) <= len(frames):
            return None
        self._begin_s = next((at for at, count in frames if self.is_spark(count)), sparks[0])
        self._level, self._frames = mean, len(frames)
        self._last_spark_s = t_s
        return Begin(t_s=self._begin_s)

    def _look_for_end(self, t_s: float, streaks: int) -> End | None:
        assert self._begin_s is not None
        if self.is_spark(streaks):
            self._frames += 1
            self._level += (streaks - self._level) / self._frames
            # a single frame is a stray; sparks last, or follow sparks
            last = self._last
            last.keep_after(t_s - self._settings.begin_s)
            if last.total >= self._least() * len(last.frames) or t_s - self._last_spark_s < 2.5 * self._period_s:
                self._last_spark_s = t_s
        if t_s - self._begin_s > self._settings.longest_s:
            return self._end("longest")
        span = max(self._settings.gap_s, self._period_s)
        mean = self._mean_over(span, t_s)
        silent = t_s - self._last_spark_s >= span - 0.5 * self._period_s
        return self._end("gap", idle=mean) if mean < self._least() and silent else None

    def _end(self, reason: str, *, idle: float = 0.0) -> End:
        assert self._begin_s is not None
        end = End(begin_s=self._begin_s, t_s=self._last_spark_s, reason=reason)
        self._begin_s = None
        self._ended_s = end.t_s
        self._idle = idle
        self._last_spark_s = math.nan
        self._clear()
        return end

    def close(self, t_s: float) -> End | None:
        """The source has ended at ``t_s``: end the contact under way, if there is one."""
        return None if self._begin_s is None else self._end("closed")
