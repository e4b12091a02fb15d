"""How clearly bars of two taught grades differ: the likelihood ratio of their figures, and what it takes to be sure.

The ratio is that of ``twin`` over ``other``: a grade with the centre of ``expected`` and the scatter of ``other``. So
it rises steadily from the one centre to the other and beyond, and a scatter of ``expected`` that was taught too small
makes no good bar look unlike its own grade. It is looked at on a fine grid of possible bars of either grade (burst
count, reach), so that its quantiles follow for any track.
"""

from __future__ import annotations

import dataclasses
import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from edgewatch.judge.bands import Band
from edgewatch.judge.likeness import (
    Evidence,
    log_likelihood,
    log_rate_likelihood,
    predictive_scatter,
    reach_spread,
)

LOST_SHARE = 0.002
"""Where track is ample, more than the promised risk asks for is asked of the ratio, until this share of good bars would
be lost by it."""


FARTHEST = 4.2
"""Deviations out to which possible bars are looked at: 3 in 100 000 lie beyond."""
MOST_COUNTS = 301
"""Counts looked at; where more can come, these stand for their neighbours."""
_REACH = np.linspace(-FARTHEST, FARTHEST, 33)
_REACH_WEIGHTS = np.exp(-0.5 * _REACH**2) / np.exp(-0.5 * _REACH**2).sum()


@dataclass(frozen=True, slots=True)
class Ratios:
    """Log likelihood ratios of possible bars, ascending, with the running total of their weights."""

    ratio: NDArray[np.float64]
    total: NDArray[np.float64]

    def quantile(self, share: float) -> float:
        """The ratio that this share of bars stays below."""
        return float(self.ratio[min(int(np.searchsorted(self.total, share)), self.ratio.size - 1)])

    def exceeded_by(self, share: float) -> float:
        """The least ratio that at most this share of bars reaches; infinite if every ratio is reached by more."""
        steps = np.flatnonzero(np.diff(self.ratio) > 1e-9) + 1
        few = steps[1.0 - self.total[steps - 1] <= share]
        return float(self.ratio[few[0]]) if few.size else math.inf

    def share_above(self, ratio: float) -> float:
        """Share of bars with at least this ratio."""
        at = int(np.searchsorted(self.ratio, ratio, side="left"))
        return 1.0 - (float(self.total[at - 1]) if at else 0.0)


def ratios(
    drawn_from: Band, expected: Band, other: Band, *, track_m: float, reach_track_m: float, figures: str = "both"
) -> Ratios:
    """Log ratios of the twin of ``expected`` over ``other`` for bars of the grade ``drawn_from`` (one of the two).

    ``track_m``: track that bursts are counted on; ``reach_track_m``: of settled windows, 0: reach is not used.
    ``figures``: ``both``, ``burst_rate`` or ``reach``.
    """
    ratio, weight = np.zeros(1), np.ones(1)
    if figures != "reach":
        ratio, weight = _count_ratios(drawn_from, expected, other, track_m)
    if figures != "burst_rate" and reach_track_m > 0.0 and expected.reach_center_mm and other.reach_center_mm:
        more, more_weight = _reach_ratios(drawn_from, expected, other, reach_track_m)
        ratio, weight = (ratio[:, None] + more).ravel(), (weight[:, None] * more_weight).ravel()
    order = np.argsort(ratio)
    return Ratios(ratio[order], np.cumsum(weight[order]))


def _count_ratios(
    drawn_from: Band, expected: Band, other: Band, track_m: float
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Every count that can come, or some of them where they are many, with its probability."""
    mean = drawn_from.rate_center_per_m * track_m
    away = math.exp(FARTHEST * predictive_scatter(drawn_from.rate_scatter, drawn_from))
    noise = FARTHEST * math.sqrt(drawn_from.rate_dispersion)
    low = math.floor(max(0.0, mean / away - noise * math.sqrt(mean / away)))
    high = math.ceil(mean * away + noise * math.sqrt(mean * away) + 4.0 * noise)
    counts = np.unique(np.rint(np.linspace(low, high, min(high - low + 1, MOST_COUNTS))))
    likely, own, theirs = (
        log_rate_likelihood(band, counts, track_m) for band in (drawn_from, twin(expected, other), other)
    )
    weights = np.exp(likely) * np.gradient(counts)
    return own - theirs, weights / weights.sum()


def twin(expected: Band, other: Band) -> Band:
    """The centre of ``expected`` with the scatter, dispersion and noise of ``other``."""
    return dataclasses.replace(
        other,
        rate_center_per_m=expected.rate_center_per_m,
        reach_center_mm=expected.reach_center_mm if other.has_reach else None,
        spark_speed_m_s=expected.spark_speed_m_s,
        wheel_speed_m_s=expected.wheel_speed_m_s,
        bars=(),
    )


def _reach_ratios(
    drawn_from: Band, expected: Band, other: Band, reach_track_m: float
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    assert drawn_from.reach_center_mm and expected.reach_center_mm and other.reach_center_mm
    value = math.log(drawn_from.reach_center_mm) + reach_spread(drawn_from, reach_track_m) * _REACH
    spread = reach_spread(other, reach_track_m)
    own, theirs = (
        -0.5 * ((value - math.log(center)) / spread) ** 2
        for center in (expected.reach_center_mm, other.reach_center_mm)
    )
    return own - theirs, _REACH_WEIGHTS


def threshold(expected: Band, other: Band, *, track_m: float, reach_track_m: float, miss: float) -> float:
    """Log ratio that a bar must reach so that at most ``miss`` of the other grade's bars would.

    That is their 1 - ``miss`` quantile. Where good bars lie far above it, the threshold is raised towards 1 / ``miss``
    (which bounds the risk by Markov's inequality, whatever the distributions) until ``LOST_SHARE`` of them are lost.
    """
    theirs = ratios(other, expected, other, track_m=track_m, reach_track_m=reach_track_m)
    own = ratios(expected, expected, other, track_m=track_m, reach_track_m=reach_track_m)
    return max(theirs.exceeded_by(miss), min(-math.log(miss), own.quantile(LOST_SHARE)))


def excluded(other: Band, expected: Band, evidence: Evidence, *, miss: float) -> bool:
    """Whether the evidence speaks so clearly for ``expected`` that a bar of ``other`` would with probability at most
    ``miss``, scatter from bar to bar included.
    """
    use_reach = bool(other.reach_center_mm and expected.reach_center_mm and evidence.reach_mm > 0.0)
    own, theirs = (log_likelihood(band, evidence, use_reach=use_reach) for band in (twin(expected, other), other))
    if own - theirs >= -math.log(miss):  # no threshold is higher
        return True
    reach_track_m = evidence.reach_track_m if use_reach else 0.0
    return own - theirs >= threshold(
        expected, other, track_m=evidence.exposure_m, reach_track_m=reach_track_m, miss=miss
    )
