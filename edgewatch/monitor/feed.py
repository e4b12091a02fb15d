"""Whether the source delivers as it should: time, number and change of pictures, not what they show.

Causes: ``stalled``, ``frozen``, ``dropping``, ``wrong_size``, ``wrong_rate``. Each needs more to begin than to go on,
so that it does not chatter.
"""

from __future__ import annotations

import itertools
import math
from collections import deque

import numpy as np
from numpy.typing import NDArray

from edgewatch.sight.frame import Frame

SPAN_S = 2.0
"""Frames of this long are looked at together for skipping and rate (s)."""
LEAST_FRAMES = 20
"""Fewer frames than this in the span say nothing."""
DROPPING_SHARE, DROPPED_ENOUGH_SHARE = 0.2, 0.05
"""Above the first share of skipped frames the source is dropping; at the second it has recovered."""
RATE_OFF_SHARE, RATE_RIGHT_SHARE = 0.15, 0.08
"""Deviation from the configured rate; spark speed and contact times are off by as much. Cameras keep their rate within
1 %; what is left is the scheduler's jitter, which over the span is below 5 %."""
GAP_APART_S = 30.0
"""One gap, as a camera leaves that was lost for a moment, is no wrong rate; another one sooner than this (s) is."""
FROZEN_S = 0.5
"""A picture that lasts this long (s) and ``FROZEN_FRAMES`` frames is frozen."""
FROZEN_FRAMES = 5
NOISY_SHARE = 0.05
"""A source of whose frames fewer than this share repeated so far has noise: its pictures never repeat by themselves.
Lossy video of a dark scene does repeat; there only a repeated picture with streaks in it is frozen."""
_MEMORY_FRAMES = 20_000
"""How far back shares are remembered; older frames count half."""
_SAMPLE_ROWS = 8
"""Every so many rows are compared first; noise tells pictures apart there, and the rest need not be read."""


class Feed:
    """What a live source's delivery says. ``update`` and ``silent`` return the causes that last.

    A source that waits for its reader (``live`` false) can only be of the wrong size or frozen.
    """

    def __init__(self, *, width_px: int, height_px: int, fps: float, live: bool, stall_s: float) -> None:
        """``fps``: the configured rate; ``stall_s``: silence that is a stall."""
        if not (fps > 0 and stall_s > 0):
            raise ValueError(f"fps = {fps!r}, stall_s = {stall_s!r}: more than 0")
        self._shape = (height_px, width_px)
        self._fps, self._live, self._stall_s = fps, live, stall_s
        self._causes: set[str] = set()
        self._last: NDArray[np.uint8] | None = None
        self._last_s: float | None = None
        self._recent: deque[tuple[float, int]] = deque()
        self._skipped = 0  # sum over ``_recent``; whole numbers do not drift
        self._gap_s = -math.inf  # end of the last gap that was left out of the rate
        self._same_since_s, self._same = 0.0, 0
        self._frames, self._repeats = 0, 0  # of runs that were not frozen
        self._lit, self._lit_again = 0, 0  # pictures with streaks, and how many of them were shown again
        self._rare = False  # whether the picture shown now is the exception in being shown again
        self.again = False
        """Whether the last frame's picture, with streaks in it, was that of the frame before, from a source that hardly
        ever does that: it is not evidence, however soon the source goes on. A clip that was brought to a higher rate by
        showing pictures twice does it all the time, and is taken as it is, in teaching as in judging."""

    def update(self, frame: Frame, *, now_s: float, streaks: int) -> frozenset[str]:
        """Take one frame, when it was taken over (monotonic, s), and how many streaks were seen in it.

        Its picture is kept until the next call, not copied. Some 20 µs at 640 x 400 px.
        """
        if self._last_s is not None and now_s - self._last_s > self._stall_s:
            self._recent.clear()  # a rate over a gap says nothing
            self._skipped = 0
        self._last_s = now_s
        self._causes.discard("stalled")
        self._set("wrong_size", frame.picture.shape != self._shape)
        self._look_for_frozen(frame, streaks)
        if self._live:
            self._look_at_rate(frame.skipped, now_s)
        return frozenset(self._causes)

    def silent(self, now_s: float) -> frozenset[str]:
        """No frame has come up to ``now_s``."""
        if self._last_s is None:
            self._last_s = now_s  # the source was opened just now
        if self._live and now_s - self._last_s > self._stall_s:
            self._causes.add("stalled")
        return frozenset(self._causes)

    def _set(self, cause: str, active: bool) -> None:
        if active:
            self._causes.add(cause)
        else:
            self._causes.discard(cause)

    def _look_for_frozen(self, frame: Frame, streaks: int) -> None:
        if self._last is None or not _is_same(frame.picture, self._last):
            if "frozen" not in self._causes:
                self._frames += 1 + self._same
                self._repeats += self._same
            if self._frames > _MEMORY_FRAMES:
                self._frames, self._repeats = self._frames // 2, self._repeats // 2
            self._last, self._same, self._same_since_s = frame.picture, 0, frame.t_s
            self._causes.discard("frozen")
            self.again = False
            self._lit += streaks > 0
            if self._lit > _MEMORY_FRAMES:
                self._lit, self._lit_again = self._lit // 2, self._lit_again // 2
            return
        self._same += 1
        if self._same == 1:
            self._rare = self._lit >= LEAST_FRAMES and self._lit_again < NOISY_SHARE * self._lit
            self._lit_again += streaks > 0  # a run counts once, however long: a halt is no habit
        self.again = self._rare and streaks > 0
        noisy = self._frames >= LEAST_FRAMES and self._repeats < NOISY_SHARE * self._frames
        if self._same >= FROZEN_FRAMES and frame.t_s - self._same_since_s >= FROZEN_S and (noisy or streaks > 0):
            self._causes.add("frozen")

    def _look_at_rate(self, skipped: int, now_s: float) -> None:
        recent = self._recent
        recent.append((now_s, skipped))
        self._skipped += skipped
        while now_s - recent[0][0] > SPAN_S:
            self._skipped -= recent.popleft()[1]
        if len(recent) < LEAST_FRAMES:
            return
        missed = self._skipped - recent[0][1]  # what was skipped before the first says nothing
        delivered = len(recent) - 1 + missed
        share = missed / delivered
        self._set("dropping", share > (DROPPED_ENOUGH_SHARE if "dropping" in self._causes else DROPPING_SHARE))
        span_s = now_s - recent[0][0]
        if span_s > 0.75 * SPAN_S:
            limit = RATE_RIGHT_SHARE if "wrong_rate" in self._causes else RATE_OFF_SHARE
            off = abs(delivered / span_s / self._fps - 1.0) > limit
            if not (off and self._is_gap(delivered, span_s, limit)):
                self._set("wrong_rate", off)

    def _is_gap(self, delivered: int, span_s: float, limit: float) -> bool:
        """Whether one gap alone puts the rate off; then the span does not say what the rate is."""
        excess_s, gap_s, end_s, frames = max(
            (later_s - sooner_s - (1 + skipped) / self._fps, later_s - sooner_s, later_s, 1 + skipped)
            for (sooner_s, _), (later_s, skipped) in itertools.pairwise(self._recent)
        )
        rest_s = span_s - gap_s
        # What is left of a long gap's span is too short to tell a rate from jitter.
        right = rest_s < 0.5 * SPAN_S or abs((delivered - frames) / rest_s / self._fps - 1.0) <= limit
        if excess_s <= 0.0 or not right or 0.0 < end_s - self._gap_s < GAP_APART_S:
            return False
        self._gap_s = end_s
        return True


def _is_same(one: NDArray[np.uint8], two: NDArray[np.uint8]) -> bool:
    if one.shape != two.shape:
        return False
    return bool(np.array_equal(one[::_SAMPLE_ROWS], two[::_SAMPLE_ROWS]) and np.array_equal(one, two))
