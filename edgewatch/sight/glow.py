"""What belongs to bursts: their arms, which are no streaks, and the glow that outlasts an exposure.

An arm is a line that runs out from a burst of this picture or of one before that may still glow, and is not the stem,
the streak that led to the burst. A burst is listed in the picture where it first shows; one without a stem went off
while the shutter was closed (late).

Burst-rate without bias: bursts get listed during the exposure and for some time before it, as long as their arms
glow on, but never for longer than the period. How long that is follows from the share of bursts with a stem: bursts
strike at a constant hazard, so bursts are spread evenly over the time in which they get listed, and those with a stem
lie in a known part of it, the exposure less the time a stem needs to show and arms need to be drawn.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from edgewatch.sight.bursts import Apexes
from edgewatch.sight.lengths import Lengths
from edgewatch.sight.optics import Optics

SAME_PX = 8.0
"""A burst nearer than this to one seen before is the same (px)."""

DRIFT_SHARE = 0.6
DRIFT_S = 0.001
"""Arms fly on with some of the particle's speed, for about a millisecond, until air has stopped such small pieces."""

ARM_SIDE_PX = 3.0
"""The line of an arm passes within this of its burst (px)."""

ARM_GAP_PX = 6.0
"""An arm of a burst in this picture begins within this of it (px); ridges end where arms overlap."""

SHORT_SHARE = 0.5
"""A line shorter than this share of the typical length is short."""

RADIAL_COS = 0.985
"""Sparks fly straight from the contact point: within 10 degrees, given the direction error of a short line."""

ACROSS_COS = 0.96
ACROSS_SHARE = 1.2
"""A line more than 16 degrees off, and not longer than sparks fly, is no spark's streak but the arm of some burst."""

STEM_LEAST_PX = 6.0
"""A stem is seen from this length on (px)."""

PRIOR_GLOW_S = 0.0015
PRIOR_BURSTS = 30.0
"""Glow assumed before bursts have told it, with the weight of this many bursts."""

FORGET = 1.0 / 2000.0
"""What was learnt about the glow fades over this many bursts."""


class Glow:
    """Bursts that may still glow, and what the share of stems says about the time in which bursts get listed."""

    def __init__(self, optics: Optics, *, longest_glow_s: float, arm_draw_s: float) -> None:
        """``longest_glow_s``: no arm glows for longer; ``arm_draw_s``: arms must draw for this long to be seen."""
        self.optics = optics
        self._arm_draw_s = arm_draw_s
        # A burst at the end of one exposure glows in the next n for which n periods less one exposure are shorter.
        self._pictures = max(0, int(np.ceil((longest_glow_s + optics.exposure_s) / optics.period_s)) - 1)
        self.recent: list[NDArray[np.float64]] = []
        before = min(optics.period_s, optics.exposure_s + PRIOR_GLOW_S - 2.0 * arm_draw_s)
        self._listed_s = max(before, 0.2 * optics.exposure_s)
        self._all = PRIOR_BURSTS
        self._stems = PRIOR_BURSTS * min(1.0, self._stem_s / self._listed_s)

    @property
    def _stem_s(self) -> float:
        """Time a picture in which a burst would show a stem."""
        return max(0.2 * self.optics.exposure_s, self.optics.exposure_s - self._arm_draw_s - self.stem_draw_s)

    stem_draw_s = 0.0002

    @property
    def gain(self) -> float:
        """Time a picture in which a burst would get listed, per exposure."""
        listed_s = min(self._stem_s * self._all / max(self._stems, 1e-9), self.optics.period_s)
        return listed_s / self.optics.exposure_s

    def remembered(self) -> NDArray[np.float64]:
        """Bursts (M, 2) px of earlier pictures that may still glow."""
        return np.concatenate(self.recent) if self.recent else np.zeros((0, 2))

    def _drift(self, lengths: Lengths) -> NDArray[np.float64]:
        """How far (px) the arms of each remembered burst may have drifted along the flight."""
        old = self.remembered()
        if not lengths.known:
            return np.zeros(len(old))
        speed = lengths.typical_px(old) / self.optics.exposure_s
        number = [len(at) for at in self.recent]
        age = np.repeat(np.arange(len(number), 0, -1), number) * self.optics.period_s
        return np.asarray(DRIFT_SHARE * speed * np.minimum(age, DRIFT_S))

    def take(self, apexes: Apexes, stem: NDArray[np.bool_], lengths: Lengths) -> NDArray[np.int64]:
        """Indices of the bursts that are new; remembers all of them."""
        old, drift = self.remembered(), self._drift(lengths)
        gx = apexes.at[:, None, 0] - old[None, :, 0]
        gy = apexes.at[:, None, 1] - old[None, :, 1]
        away = old - np.asarray(self.optics.contact_px)
        away /= np.maximum(np.hypot(away[:, 0], away[:, 1]), 1e-6)[:, None]
        # The cloud of arms drifts on along the flight: the nearest point of the way it may have come counts.
        on = np.clip(gx * away[:, 0] + gy * away[:, 1], 0.0, drift)
        gap = np.hypot(gx - on * away[:, 0], gy - on * away[:, 1])
        fresh = np.flatnonzero(~(gap < SAME_PX).any(axis=1))
        self.recent = [*self.recent, apexes.at][-self._pictures :] if self._pictures else []
        fade = (1.0 - FORGET) ** fresh.size
        self._all = self._all * fade + fresh.size
        self._stems = self._stems * fade + float(stem[fresh].sum())
        return fresh


@dataclass(frozen=True, slots=True, eq=False)
class Sorted:
    """``begin``, ``end`` (N, 2) px: lines, cut where they ran on into an arm; ``streak`` (N,) bool: no arm;
    ``stem`` (M,) bool: the burst has a stem; ``arms`` (M,) int64: lines that run out from it, three at least.
    """

    begin: NDArray[np.float64]
    end: NDArray[np.float64]
    streak: NDArray[np.bool_]
    stem: NDArray[np.bool_]
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
    contact = np.asarray(glow.optics.contact_px)
    end = end.copy()
    gap = end - begin
    length = np.maximum(np.hypot(gap[:, 0], gap[:, 1]), 1e-6)
    unit = gap / length[:, None]
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
    begins_here = on & (np.abs(along) <= ARM_GAP_PX) & (short[:, None] | ~straight)
    across = on & ~straight & (along > -ARM_GAP_PX) & (left > -ARM_GAP_PX) & short[:, None]
    streak &= ~(begins_here | across).any(axis=1)
    cut = np.flatnonzero(runs_on.any(axis=1))
    if cut.size:
        which = np.argmax(runs_on[cut], axis=1)
        end[cut] = begin[cut] + unit[cut] * along[cut, which][:, None]

    # Of earlier bursts: short lines that point back to one within reach of its arms.
    old = glow.remembered()
    if len(old) and len(begin):
        ox, oy = old[None, :, 0] - begin[:, None, 0], old[None, :, 1] - begin[:, None, 1]
        beside = np.abs(ox * unit[:, None, 1] - oy * unit[:, None, 0]) < ARM_SIDE_PX
        before = ox * unit[:, None, 0] + oy * unit[:, None, 1]
        reach = np.where(np.isfinite(typical), typical, 0.0)[:, None] * 1.5
        arm = beside & (before > -reach) & (before < length[:, None] + reach) & (short[:, None] & ~straight)
        arm |= beside & (np.abs(before) <= ARM_GAP_PX) & short[:, None]
        streak &= ~arm.any(axis=1)
    arms = (begins_here | across | runs_on).sum(axis=0) + (ends_here | runs_on).sum(axis=0)
    return Sorted(
        begin=begin,
        end=end,
        streak=streak,
        stem=(ends_here | runs_on).any(axis=0),
        arms=np.maximum(arms, 3).astype(np.int64),
    )
