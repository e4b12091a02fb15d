"""What belongs to bursts: their arms, which are no streaks, and the glow that outlasts an exposure.

An arm is a line that runs out from a burst of this picture or of one before that may still glow, and is not the stem,
the streak that led to the burst. A burst is listed in the picture where it first shows. A late one went off while the
shutter was closed: the outer parts of its arms show, without the streak that led to it.

Burst-rate without bias: a burst gets listed when it goes off during the exposure, but for the last part of it, in which
its arms cannot be drawn long enough; and when it goes off so shortly before that enough of its arms is left to see.
Both times are the detector's own and do not depend on the camera's timing, so they are settings, measured with both
simulations; never is a burst listed twice, so the time stays below the period.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from edgewatch.sight import native
from edgewatch.sight.bursts import Apexes
from edgewatch.sight.lengths import Lengths
from edgewatch.sight.native import records
from edgewatch.sight.optics import Optics

SAME_PX = 8.0
"""A burst nearer than this to one seen before is the same (px)."""

FRESH_LEAST, FRESH_NEAR = 0.5, 0.8
"""A burst is news from this probability on; a late one near a burst seen before from the second, since it is more
likely to be that one."""

LATE_SURE = 0.5
"""A burst is late from this probability on."""

DRIFT_SHARE = 0.6
DRIFT_S = 0.001
"""Arms fly on with some of the particle's speed, for about a millisecond, until air has stopped such small pieces."""

ARM_SIDE_PX = 3.0
"""The line of an arm passes within this of its burst (px)."""

ARM_GAP_PX = 6.0
LATE_GAP_PX = 16.0
"""An arm of a burst in this picture begins within this of it (px); ridges end where arms overlap. Of a late burst only
the outer parts of arms are seen."""

SHORT_SHARE = 0.5
"""A line shorter than this share of the typical length is short."""

RADIAL_COS = 0.985
"""Sparks fly straight from the contact point: within 10 degrees, given the direction error of a short line."""

ACROSS_COS = 0.96
ACROSS_SHARE = 1.2
"""A line more than 16 degrees off, and not longer than sparks fly, is no spark's streak but the arm of some burst."""

STEM_LEAST_PX = 6.0
"""A stem is seen from this length on (px)."""

OLD_REACH = 1.5
"""Arms of a burst of an earlier picture are within this many typical lengths of it."""

LEAST_ARMS = 3

LIMIT_POWER = 4.0
"""No burst is listed twice, so the time in which it gets listed stays below the period; softly, because near the limit
a burst that hardly shows in one exposure has a second chance in the next, not a certainty."""

SEEN_SHARE = 0.94
"""Of the bursts that go off in that time so many are seen and sure enough for the rate: mean over four cameras and both
simulations, tuning scenes. It sets the rate's height, and nothing else."""

LEAST_LISTED = 0.1
"""However short the exposure, this share of it counts: some arms are drawn at once."""


class Glow:
    """Bursts that may still glow, and the time in which bursts get listed."""

    def __init__(self, optics: Optics, *, longest_glow_s: float, arm_draw_s: float, late_listed_s: float) -> None:
        """``longest_glow_s``: no arm glows for longer; ``arm_draw_s``: arms must draw for this long to be seen;
        ``late_listed_s``: bursts are listed that went off up to this long before the exposure.
        """
        self.optics = optics
        # A burst at the end of one exposure glows in the next n for which n periods less one exposure are shorter.
        self._pictures = max(0, int(np.ceil((longest_glow_s + optics.exposure_s) / optics.period_s)) - 1)
        self.memory = np.zeros((0, 4))
        """Bursts of earlier pictures that may still glow, (M, 4): x, y px, probability, how many pictures ago."""
        listed_s = max(optics.exposure_s - arm_draw_s + late_listed_s, LEAST_LISTED * optics.exposure_s)
        limited_s = (listed_s**-LIMIT_POWER + optics.period_s**-LIMIT_POWER) ** (-1.0 / LIMIT_POWER)
        self.gain = float(SEEN_SHARE * limited_s / optics.exposure_s)

    def _drift(self, old: NDArray[np.float64], lengths: Lengths) -> NDArray[np.float64]:
        """How far (px) the arms of each remembered burst may have drifted along the flight."""
        if not lengths.known:
            return np.zeros(len(old))
        speed = lengths.typical_px(old[:, :2]) / self.optics.exposure_s
        return np.asarray(DRIFT_SHARE * speed * np.minimum(old[:, 3] * self.optics.period_s, DRIFT_S))

    def news(self, apexes: Apexes, lengths: Lengths, least_sure: float = 0.0) -> NDArray[np.int64]:
        """Indices of the bursts that are new; ``least_sure``: bursts that are less probable are no matter, neither of
        this picture nor of earlier ones.

        What went off during this exposure is new even where an earlier burst may still glow: sparks of one kind burst
        again and again, and follow each other. So is what the net, which sees the picture before, takes for new.
        """
        old = self.memory[self.memory[:, 2] >= least_sure]
        gx = apexes.at[:, None, 0] - old[None, :, 0]
        gy = apexes.at[:, None, 1] - old[None, :, 1]
        away = old[:, :2] - np.asarray(self.optics.contact_px)
        away /= np.maximum(np.hypot(away[:, 0], away[:, 1]), 1e-6)[:, None]
        # The cloud of arms drifts on along the flight: the nearest point of the way it may have come counts.
        on = np.clip(gx * away[:, 0] + gy * away[:, 1], 0.0, self._drift(old, lengths))
        gap = np.hypot(gx - on * away[:, 0], gy - on * away[:, 1])
        near = (gap < SAME_PX).any(axis=1) & (apexes.late > LATE_SURE)
        seen_before = apexes.fresh < np.where(near, FRESH_NEAR, FRESH_LEAST)
        return np.flatnonzero(~seen_before & (apexes.sure >= least_sure))

    def remember(self, apexes: Apexes) -> None:
        """Keep the bursts of this picture, and those of earlier ones for as long as arms may glow."""
        new = np.column_stack([apexes.at, apexes.sure, np.zeros(len(apexes.at))])
        bursts = np.concatenate([self.memory, new])
        bursts[:, 3] += 1.0
        self.memory = bursts[bursts[:, 3] <= self._pictures]

    def take(self, apexes: Apexes, lengths: Lengths) -> NDArray[np.int64]:
        """Indices of the bursts that are new; remembers all of them."""
        fresh = self.news(apexes, lengths)
        self.remember(apexes)
        return fresh

    def news_rules(self) -> records.NewsRules:
        """The same for the compiled steps."""
        return records.NewsRules(
            same_px=SAME_PX,
            fresh_least=FRESH_LEAST,
            fresh_near=FRESH_NEAR,
            late_sure=LATE_SURE,
            drift_share=DRIFT_SHARE,
            drift_s=DRIFT_S,
            period_s=self.optics.period_s,
            exposure_s=self.optics.exposure_s,
            pictures=self._pictures,
        )


@dataclass(frozen=True, slots=True, eq=False)
class Sorted:
    """``begin``, ``end`` (N, 2) px: lines, cut where they ran on into an arm; ``streak`` (N,) bool: no arm;
    ``arms`` (M,) int64: lines that run out from it, three at least.
    """

    begin: NDArray[np.float64]
    end: NDArray[np.float64]
    streak: NDArray[np.bool_]
    arms: NDArray[np.int64]


def sort_lines(
    begin: NDArray[np.float64],
    end: NDArray[np.float64],
    whole: NDArray[np.bool_],
    apexes: Apexes,
    glow: Glow,
    lengths: Lengths,
) -> Sorted:
    """Tell streaks from arms. ``begin``, ``end`` (N, 2) px, the first nearer the wheel; ``whole``: both ends seen."""
    if native.LIBRARY:
        return _sort_compiled(begin, end, whole, apexes, glow, lengths)
    contact = np.asarray(glow.optics.contact_px)
    end = end.copy()
    run = end - begin
    length = np.maximum(np.hypot(run[:, 0], run[:, 1]), 1e-6)
    unit = run / length[:, None]
    middle = 0.5 * (begin + end)
    away = middle - contact
    away /= np.maximum(np.hypot(away[:, 0], away[:, 1]), 1e-6)[:, None]
    radial = np.abs((away * unit).sum(axis=1))
    typical = lengths.typical_px(middle) if lengths.known else np.full(len(begin), np.inf)
    short = length < SHORT_SHARE * typical
    streak = np.ones(len(begin), np.bool_)
    if lengths.from_contact:
        streak = (radial > ACROSS_COS) | (length > ACROSS_SHARE * typical)

    # Of this picture's bursts: position of each along each line, from its begin, and beside it.
    along = (apexes.at[None, :, 0] - begin[:, None, 0]) * unit[:, None, 0]
    along += (apexes.at[None, :, 1] - begin[:, None, 1]) * unit[:, None, 1]
    side = np.abs(
        (apexes.at[None, :, 0] - begin[:, None, 0]) * unit[:, None, 1]
        - (apexes.at[None, :, 1] - begin[:, None, 1]) * unit[:, None, 0]
    )
    on = side < ARM_SIDE_PX
    straight = (radial > RADIAL_COS)[:, None]
    left = length[:, None] - along
    ends_here = on & straight & (along > STEM_LEAST_PX) & (np.abs(left) <= ARM_GAP_PX)
    runs_on = on & straight & (along > STEM_LEAST_PX) & (left > ARM_GAP_PX)
    runs_on &= ~whole[:, None] | (left < SHORT_SHARE * typical[:, None])
    if len(begin):  # one stem leads to a burst: the line that comes nearest
        nearest = np.argmin(np.where(ends_here | runs_on, side, np.inf), axis=0)
        only = np.arange(len(begin))[:, None] == nearest
        ends_here &= only
        runs_on &= only
    gap = np.where(apexes.late > LATE_SURE, LATE_GAP_PX, ARM_GAP_PX)
    begins_here = on & (along <= ARM_GAP_PX) & (along >= -gap) & (short[:, None] | ~straight)
    across = on & ~straight & (along > -ARM_GAP_PX) & (left > -ARM_GAP_PX) & short[:, None]
    streak &= ~(begins_here | across).any(axis=1)
    cut = np.flatnonzero(runs_on.any(axis=1))
    if cut.size:
        which = np.argmax(runs_on[cut], axis=1)
        end[cut] = begin[cut] + unit[cut] * along[cut, which][:, None]

    # Of earlier bursts: short lines that point back to one within reach of its arms.
    old = glow.memory
    if len(old) and len(begin):
        ox, oy = old[None, :, 0] - begin[:, None, 0], old[None, :, 1] - begin[:, None, 1]
        beside = np.abs(ox * unit[:, None, 1] - oy * unit[:, None, 0]) < ARM_SIDE_PX
        before = ox * unit[:, None, 0] + oy * unit[:, None, 1]
        reach = np.where(np.isfinite(typical), typical, 0.0)[:, None] * OLD_REACH
        arm = beside & (before > -reach) & (before < length[:, None] + reach) & (short[:, None] & ~straight)
        arm |= beside & (np.abs(before) <= ARM_GAP_PX) & short[:, None]
        streak &= ~arm.any(axis=1)
    arms = (begins_here | across | runs_on).sum(axis=0) + (ends_here | runs_on).sum(axis=0)
    return Sorted(
        begin=begin,
        end=end,
        streak=streak,
        arms=np.maximum(arms, LEAST_ARMS).astype(np.int64),
    )


def arm_rules(from_contact: bool = False) -> records.ArmRules:
    """What makes a line an arm, for the compiled steps; ``from_contact``: see ``Lengths``."""
    return records.ArmRules(
        late_sure=LATE_SURE,
        arm_side_px=ARM_SIDE_PX,
        arm_gap_px=ARM_GAP_PX,
        late_gap_px=LATE_GAP_PX,
        short_share=SHORT_SHARE,
        radial_cos=RADIAL_COS,
        across_cos=ACROSS_COS,
        across_share=ACROSS_SHARE,
        stem_least_px=STEM_LEAST_PX,
        old_reach=OLD_REACH,
        from_contact=from_contact,
        least_arms=LEAST_ARMS,
    )


def _sort_compiled(
    begin: NDArray[np.float64],
    end: NDArray[np.float64],
    whole: NDArray[np.bool_],
    apexes: Apexes,
    glow: Glow,
    lengths: Lengths,
) -> Sorted:
    end, old = end.copy(), np.ascontiguousarray(glow.memory)
    at, late = np.ascontiguousarray(apexes.at), np.ascontiguousarray(apexes.late)
    streak, arms = np.empty(len(begin), np.bool_), np.empty(len(at), np.int64)
    done = native.LIBRARY.edgewatch_sort(
        len(begin),
        native.place(begin),
        native.place(end),
        native.place(whole),
        len(at),
        native.place(at),
        native.place(late),
        len(old),
        native.place(old),
        native.reference(lengths.record()),
        native.reference(arm_rules(lengths.from_contact)),
        native.place(streak),
        native.place(arms),
    )
    native.enough(done, 0)
    return Sorted(begin=begin, end=end, streak=streak, arms=arms)
