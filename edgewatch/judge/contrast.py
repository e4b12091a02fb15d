"""Which taught grades can be told apart, and how long the contact must last for it."""

from __future__ import annotations

import functools
import math
from collections.abc import Sequence
from dataclasses import dataclass

from scipy.special import ndtr, ndtri

from edgewatch.judge.bands import Band
from edgewatch.judge.counts import NORMAL_WEIGHTS, at_least, at_most
from edgewatch.judge.evidence import RateEvidence
from edgewatch.judge.likeness import means, predictive_scatter

OWN_SHARE = 0.95
"""A pair is told apart if at least this share of the expected grade's own bars stays free of the other's likeness."""
LONGEST_TRACK_M = 1e6
"""Beyond this track (hours of contact) a pair counts as not told apart."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Pair:
    """``expected`` on the line, ``actual`` touches the wheel.

    ``told_apart``: at some contact time the station calls at most ``miss`` of the actual grade's bars conforming while
    ``OWN_SHARE`` of its own can be; ``track_m`` and ``seconds`` say from when on (infinite if never). ``by``: the
    figure that does it. ``alert_track_m``, ``alert_seconds``: about how long until a typical bar of the actual grade is
    condemned by its hazard (infinite if that lies in the expected band). ``limit_share``: share of own bars that can be
    told from the other grade with unlimited track.
    """

    expected: str
    actual: str
    told_apart: bool
    by: str
    track_m: float
    seconds: float
    alert_track_m: float
    alert_seconds: float
    limit_share: float


@functools.lru_cache(maxsize=256)
def rate_share(expected: Band, other: Band, track_m: float, risk: float) -> float:
    """Share of ``expected`` bars whose burst count excludes ``other`` at ``risk`` after ``track_m``."""
    upward = expected.rate_center_per_m > other.rate_center_per_m
    mean_other = means(other, track_m)
    own = means(expected, track_m)
    tail = at_least if upward else at_most

    def excludes(count: int) -> bool:
        return float(NORMAL_WEIGHTS @ tail(count, mean_other, other.rate_dispersion)) <= risk

    # smallest (upward) or largest count that excludes, by bisection: the tail is monotone in the count
    top = int(mean_other.max() * 3 + own.max() * 3 + 200)
    low, high = 0, top
    if upward:
        while low < high:
            middle = (low + high) // 2
            low, high = (low, middle) if excludes(middle) else (middle + 1, high)
        return float(NORMAL_WEIGHTS @ at_least(low, own, expected.rate_dispersion))
    low = -1
    while low < high:
        middle = (low + high + 1) // 2
        low, high = (middle, high) if excludes(middle) else (low, middle - 1)
    return float(NORMAL_WEIGHTS @ at_most(low, own, expected.rate_dispersion))


def _limit_share(expected: Band, other: Band, risk: float) -> float:
    """The same with unlimited track: only the scatter from bar to bar is left."""
    gap = abs(math.log(expected.rate_center_per_m / other.rate_center_per_m))
    own, others = predictive_scatter(expected.rate_scatter, expected), predictive_scatter(other.rate_scatter, other)
    return float(ndtr((gap + float(ndtri(risk)) * others) / own))


def _reach_limit(expected: Band, other: Band, risk: float) -> float:
    if not (expected.reach_center_mm and other.reach_center_mm):
        return 0.0
    gap = abs(math.log(expected.reach_center_mm / other.reach_center_mm))
    own, others = predictive_scatter(expected.reach_scatter, expected), predictive_scatter(other.reach_scatter, other)
    return float(ndtr((gap + float(ndtri(risk)) * others) / own))


def _reach_share(expected: Band, other: Band, track_m: float, risk: float) -> float:
    """Share of own bars told from ``other`` by reach after ``track_m``."""
    if not (expected.reach_center_mm and other.reach_center_mm):
        return 0.0
    gap = abs(math.log(expected.reach_center_mm / other.reach_center_mm))

    def spread(band: Band) -> float:
        noise = band.reach_noise_mm2_m or 0.0
        assert band.reach_center_mm
        return math.hypot(
            predictive_scatter(band.reach_scatter, band), math.sqrt(noise / track_m) / band.reach_center_mm
        )

    return float(ndtr((gap + float(ndtri(risk)) * spread(other)) / spread(expected)))


@functools.lru_cache(maxsize=512)
def told_apart(expected: Band, other: Band, miss: float) -> bool:
    """Whether enough of the expected grade's bars can ever be told from ``other``."""
    return compare(expected, other, miss=miss, track_m_s=1.0).told_apart


def compare(expected: Band, other: Band, *, miss: float, track_m_s: float, false_alarm: float = 0.001) -> Pair:
    """One pair. ``track_m_s``: metres of track that a second of contact shows (``ValueError`` unless positive)."""
    if not track_m_s > 0.0:
        raise ValueError(f"track_m_s = {track_m_s!r}: a positive number is needed")
    both = expected.has_reach and other.has_reach
    risk = 0.5 * miss if both else miss
    rate_limit = _limit_share(expected, other, risk)
    reach_limit = _reach_limit(expected, other, risk) if both else 0.0
    by = "burst_rate" if rate_limit >= reach_limit else "reach"
    limit = max(rate_limit, reach_limit)

    def share(track_m: float) -> float:
        if by == "burst_rate":
            return rate_share(expected, other, track_m, risk)
        return _reach_share(expected, other, track_m, risk)

    track = math.inf
    if limit > OWN_SHARE and share(LONGEST_TRACK_M) >= OWN_SHARE:
        low, high = math.log(1e-3), math.log(LONGEST_TRACK_M)
        while high - low > 0.01:
            middle = 0.5 * (low + high)
            low, high = (low, middle) if share(math.exp(middle)) >= OWN_SHARE else (middle, high)
        track = math.exp(high)
    alert = RateEvidence(expected).track_to_alert_m(other.rate_center_per_m, false_alarm)
    return Pair(
        expected=expected.grade,
        actual=other.grade,
        told_apart=math.isfinite(track),
        by=by,
        track_m=track,
        seconds=track / track_m_s,
        alert_track_m=alert,
        alert_seconds=alert / track_m_s,
        limit_share=limit,
    )


def contrast(bands: Sequence[Band], *, miss: float, track_m_s: float, false_alarm: float = 0.001) -> tuple[Pair, ...]:
    """Every ordered pair of taught grades."""
    return tuple(
        compare(expected, other, miss=miss, track_m_s=track_m_s, false_alarm=false_alarm)
        for expected in bands
        for other in bands
        if other is not expected
    )
