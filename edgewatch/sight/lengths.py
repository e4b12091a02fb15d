"""How long streaks are at a distance from the contact point.

All sparks of one stream fly at nearly the same speed at one distance, so a streak of which one end is hidden is known
to be about as long as its neighbours. What is learnt comes from streaks that lead from darkness to darkness.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from edgewatch.sight import native
from edgewatch.sight.native import records
from edgewatch.sight.ranks import middle

KEPT = 400
"""Streaks remembered: several pictures' worth, so that a change of wheel speed is followed within a second."""

LEAST_KEPT = 8
"""Fewer streaks than this say nothing."""

NEW_PART = 8
"""The table is made anew once so great a part (one in NEW_PART) is new: it changes slowly, and costs."""

PARTS = 8
PART_LEAST = 12
"""The distance is cut into at most PARTS parts of at least PART_LEAST streaks."""

MIDDLE_SPREAD = 1.4826
"""Standard deviation of normal values per middle of their absolute values."""

SPREAD_LEAST, SPREAD_MOST = 0.1, 0.6
"""Limits of the deviation of the logarithm of length."""

RADIAL_COS = 0.985
"""Only lines that come from the contact point teach: within 10 degrees. Arms of bursts fly any way."""

SHARE_KEEP = 0.95
FROM_CONTACT_SHARE = 0.5
"""Over some twenty pictures, this share of the length seen comes from the contact point if that is given rightly."""

LONGEST_FACTOR = 3.0
LONGEST_PX = 400.0
"""No streak is longer than this many typical lengths; before any is known, than so many px."""


RULES = records.LengthRules(
    radial_cos=RADIAL_COS,
    share_keep=SHARE_KEEP,
    from_contact_share=FROM_CONTACT_SHARE,
    middle_spread=MIDDLE_SPREAD,
    spread_least=SPREAD_LEAST,
    spread_most=SPREAD_MOST,
    longest_factor=LONGEST_FACTOR,
    most_kept=KEPT,
    least_kept=LEAST_KEPT,
    new_part=NEW_PART,
    most_parts=PARTS,
    part_least=PART_LEAST,
)
"""All of this for the compiled form."""


class Lengths:
    """Lengths seen lately, as a function of the distance from the contact point. The compiled form learns in the same
    memory.
    """

    def __init__(self, contact_px: tuple[float, float]) -> None:
        """``contact_px``: the contact point (px)."""
        self._contact = np.asarray(contact_px, dtype=np.float64)
        self._kept, self._table = np.zeros((2, KEPT)), np.zeros((2, PARTS))
        known = records.Lengths(
            places=native.place(self._table),
            typical=native.place(self._table, PARTS),
            contact_x=contact_px[0],
            contact_y=contact_px[1],
            longest_px=LONGEST_PX,
            spread=SPREAD_MOST,
        )
        self.memory = records.LengthMemory(
            lengths=known, away=native.place(self._kept), log=native.place(self._kept, KEPT)
        )

    @property
    def known(self) -> bool:
        """Whether enough streaks have been seen."""
        return bool(self.memory.lengths.number)

    @property
    def from_contact(self) -> bool:
        """Whether streaks come from the contact point as given: most of their length lies that way."""
        return self.known and self.memory.straight_px > FROM_CONTACT_SHARE * self.memory.all_px

    @property
    def longest_px(self) -> float:
        """No streak is longer than this (px)."""
        return float(self.memory.lengths.longest_px)

    @property
    def spread(self) -> float:
        """Standard deviation of the logarithm of length."""
        return float(self.memory.lengths.spread)

    def typical_px(self, at: NDArray[np.float64]) -> NDArray[np.float64]:
        """Typical length (px) of streaks whose middle is at points (N, 2) px."""
        return np.asarray(np.exp(np.interp(self.away_px(at), *self._known())))

    def deviation(self, at: NDArray[np.float64], length_px: NDArray[np.floating]) -> NDArray[np.float64]:
        """How unusual lengths are at points (N, 2), in standard deviations of the logarithm."""
        expected = np.interp(self.away_px(at), *self._known())
        return np.asarray((np.log(length_px) - expected) / self.spread)

    def record(self) -> records.Lengths:
        """The same for the compiled steps."""
        known: records.Lengths = self.memory.lengths
        return known

    def _known(self) -> NDArray[np.float64]:
        """Distances and typical logarithms of length there, (2, P)."""
        return self._table[:, : self.memory.lengths.number]

    def turn(self, at: NDArray[np.float64], unit: NDArray[np.float64]) -> NDArray[np.float64]:
        """Sine of the angle by which each unit vector (N, 2) at a point (N, 2) px is turned, x towards y, from the line
        that joins the point with the contact point.
        """
        away = at - self._contact
        sine = (away[:, 0] * unit[:, 1] - away[:, 1] * unit[:, 0]) / np.maximum(self.away_px(at), 1e-6)
        return np.asarray(np.where((away * unit).sum(axis=1) < 0.0, -sine, sine))

    def learn(self, begin: NDArray[np.float64], end: NDArray[np.float64]) -> None:
        """Add streaks from ``begin`` to ``end`` (N, 2) px."""
        gap, centre = end - begin, 0.5 * (begin + end)
        length, away = np.maximum(np.hypot(gap[:, 0], gap[:, 1]), 1.0), self.away_px(centre)
        along = np.abs((gap * (centre - self._contact)).sum(axis=1))
        straight = along > RADIAL_COS * length * away
        total, kept = float(length.sum()), float(length[straight].sum())
        memory, fresh = self.memory, np.stack([away[straight], np.log(length[straight])])
        memory.all_px = SHARE_KEEP * memory.all_px + total
        memory.straight_px = SHARE_KEEP * memory.straight_px + kept
        kept_now = np.concatenate([self._kept[:, : memory.kept], fresh], axis=1)[:, -KEPT:]
        count = memory.kept = kept_now.shape[1]
        self._kept[:, :count] = kept_now
        memory.fresh += fresh.shape[1]
        if count < LEAST_KEPT or (self.known and memory.fresh < count // NEW_PART):
            return
        memory.fresh = 0
        parts = min(max(count // PART_LEAST, 1), PARTS)
        places, typical, off = _find_typical(kept_now[0], kept_now[1], parts)
        self._table[:, :parts] = places, typical
        memory.lengths.number = parts
        memory.lengths.spread = min(max(MIDDLE_SPREAD * off, SPREAD_LEAST), SPREAD_MOST)
        memory.lengths.longest_px = LONGEST_FACTOR * float(np.exp(typical.max()))

    def away_px(self, at: NDArray[np.float64]) -> NDArray[np.float64]:
        """Distance (px) of points (N, 2) px from the contact point."""
        return np.asarray(np.hypot(at[:, 0] - self._contact[0], at[:, 1] - self._contact[1]))


def _find_typical(
    away: NDArray[np.float64], log: NDArray[np.float64], parts: int
) -> tuple[NDArray[np.float64], NDArray[np.float64], float]:
    """Of streaks at distances ``away`` (N,) px with logarithms of length ``log`` (N,), cut into parts: distance of each
    part, typical logarithm there, and the middle of what longer ones have more than that.
    """
    count = away.size
    order = np.argsort(away, kind="stable")
    away, log = away[order], log[order]
    cuts = np.arange(parts + 1) * count // parts
    part = np.repeat(np.arange(parts), np.diff(cuts))
    # Medians weighted by length: a streak cut short by a burst says less than one drawn in full.
    ranked = np.lexsort((log, part))
    weight = np.cumsum(np.exp(log[ranked]))
    before = np.concatenate(([0.0], weight))[cuts]
    half = np.searchsorted(weight, 0.5 * (before[:-1] + before[1:]))
    typical = log[ranked][np.minimum(half, count - 1)]
    # Air only slows sparks down: nearer the wheel they are no shorter, whatever fragments say.
    typical = np.ascontiguousarray(np.maximum.accumulate(typical[::-1])[::-1])
    # Bursts shorten streaks, nothing makes them longer: the deviation is that of the longer ones.
    above = log - typical[part]
    above = above[above > 0.0]
    return away[(cuts[:-1] + cuts[1:]) // 2], typical, middle(above) if above.size else 0.0
