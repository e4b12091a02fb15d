"""Which taught grades can be told apart, and how long the contact must last for it."""

from __future__ import annotations

import functools
import math
from collections.abc import Sequence
from dataclasses import dataclass

from edgewatch.judge.bands import Band
from edgewatch.judge.evidence import RateEvidence
from edgewatch.judge.separation import ratios

OWN_SHARE = 0.95
"""A pair is told apart if at least this share of the expected grade's own bars speaks clearly against the other."""
LONGEST_TRACK_M = 1e6
"""Beyond this track (hours of contact) a pair counts as not told apart."""
SETTLED_SHARE = 0.6
"""Share of the track that lies in settled windows, which reach is taken from, in a contact of usual length."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Pair:
    """``expected`` on the line, ``actual`` touches the wheel.

    ``told_apart``: at some contact time at least ``OWN_SHARE`` of the expected grade's bars can be called conforming
    while at most ``miss`` of the actual grade's would be; ``track_m`` and ``seconds`` say from when on (infinite if
    never). ``by``: the figure that does most of it. ``alert_track_m``, ``alert_seconds``: about how long until a
    typical bar of the actual grade is condemned by its hazard (infinite if that lies in the expected band).
    ``limit_share``: share of own bars that can be told from the other grade with unlimited track.
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


def told_share(expected: Band, other: Band, track_m: float, *, miss: float, figures: str = "both") -> float:
    """Share of ``expected`` bars that differ from ``other`` more than all but ``miss`` of the other's bars do.

    ``figures``: ``both``, ``burst_rate`` or ``reach``.
    """
    reach_track_m = SETTLED_SHARE * track_m
    own, theirs = (
        ratios(band, expected, other, track_m=track_m, reach_track_m=reach_track_m, figures=figures)
        for band in (expected, other)
    )
    return own.share_above(theirs.exceeded_by(miss))


@functools.lru_cache(maxsize=512)
def told_apart(expected: Band, other: Band, miss: float) -> bool:
    """Whether enough of the expected grade's bars can ever be told from ``other``."""
    return told_share(expected, other, LONGEST_TRACK_M, miss=miss) >= OWN_SHARE


def compare(expected: Band, other: Band, *, miss: float, track_m_s: float, false_alarm: float = 0.001) -> Pair:
    """One pair. ``track_m_s``: metres of track that a second of contact shows (``ValueError`` unless positive)."""
    if not track_m_s > 0.0:
        raise ValueError(f"track_m_s = {track_m_s!r}: a positive number is needed")
    limit = told_share(expected, other, LONGEST_TRACK_M, miss=miss)
    track = math.inf
    if limit >= OWN_SHARE:
        low, high = math.log(1e-3), math.log(LONGEST_TRACK_M)
        while high - low > 0.01:
            middle = 0.5 * (low + high)
            enough = told_share(expected, other, math.exp(middle), miss=miss) >= OWN_SHARE
            low, high = (low, middle) if enough else (middle, high)
        track = math.exp(high)
    at = track if math.isfinite(track) else LONGEST_TRACK_M
    alone = {name: told_share(expected, other, at, miss=miss, figures=name) for name in ("burst_rate", "reach")}
    alert = RateEvidence(expected).track_to_alert_m(other.rate_center_per_m, false_alarm)
    return Pair(
        expected=expected.grade,
        actual=other.grade,
        told_apart=math.isfinite(track),
        by="reach" if alone["reach"] > alone["burst_rate"] else "burst_rate",
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
