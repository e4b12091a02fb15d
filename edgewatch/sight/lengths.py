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


class Lengths:
    """Lengths seen lately, as a function of the distance from the contact point."""

    def __init__(self, contact_px: tuple[float, float]) -> None:
        """``contact_px``: the contact point (px)."""
        self._contact = np.asarray(contact_px, dtype=np.float64)
        self._away = np.zeros(0)
        self._log = np.zeros(0)
        self._places = np.zeros(0)
        self._typical = np.zeros(0)
        self._new = 0
        self._all_px = 0.0
        self._straight_px = 0.0
        self.spread = SPREAD_MOST
        self._record: records.Lengths | None = None

    @property
    def known(self) -> bool:
        """Whether enough streaks have been seen."""
        return bool(self._places.size)

    @property
    def from_contact(self) -> bool:
        """Whether streaks come from the contact point as given: most of their length lies that way."""
        return self.known and self._straight_px > FROM_CONTACT_SHARE * self._all_px

    @property
    def longest_px(self) -> float:
        """No streak is longer than this (px)."""
        return LONGEST_FACTOR * float(np.exp(self._typical.max())) if self.known else LONGEST_PX

    def typical_px(self, at: NDArray[np.float64]) -> NDArray[np.float64]:
        """Typical length (px) of streaks whose middle is at points (N, 2) px."""
        return np.asarray(np.exp(np.interp(self.away_px(at), self._places, self._typical)))

    def deviation(self, at: NDArray[np.float64], length_px: NDArray[np.floating]) -> NDArray[np.float64]:
        """How unusual lengths are at points (N, 2), in standard deviations of the logarithm."""
        expected = np.interp(self.away_px(at), self._places, self._typical)
        return np.asarray((np.log(length_px) - expected) / self.spread)

    def record(self) -> records.Lengths:
        """The same for the compiled steps, good until the next streaks are learnt from."""
        if self._record is None:
            self._record = records.Lengths(
                native.place(self._places),
                native.place(self._typical),
                *self._contact.tolist(),
                self.longest_px,
                self.spread,
                self._places.size,
            )
        return self._record

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
        self._all_px = SHARE_KEEP * self._all_px + total
        self._straight_px = SHARE_KEEP * self._straight_px + kept
        self._away = np.concatenate([self._away, away[straight]])[-KEPT:]
        self._log = np.concatenate([self._log, np.log(length[straight])])[-KEPT:]
        self._new += int(straight.sum())
        count = self._away.size
        if count < LEAST_KEPT or (self.known and self._new < count // NEW_PART):
            return
        self._new = 0
        parts = min(max(count // PART_LEAST, 1), PARTS)
        self._places, self._typical, off = _find_typical(self._away, self._log, parts)
        self.spread = min(max(1.4826 * off, SPREAD_LEAST), SPREAD_MOST)
        self._record = None

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
    if native.LIBRARY:
        found, off = np.empty((2, parts)), np.empty(1)
        places = [native.place(one) for one in (away, log, found, off)]
        done = native.LIBRARY.edgewatch_typical(
            count, *places[:2], parts, places[2], native.place(found, parts), places[3]
        )
        native.enough(done, 0)
        return found[0], found[1], float(off[0])
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
