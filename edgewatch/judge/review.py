"""Journalled bars judged again under other bands, risks or window lengths: no video needed."""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass

from edgewatch.figures.values import Figures
from edgewatch.judge.bands import Band
from edgewatch.judge.causes import CAUSES
from edgewatch.judge.trial import CONFORMING, NONCONFORMING, Judgement, Trial

FOLLOWS = frozenset({"too_few_streaks", "evidence_short", "resembles_other", "no_band", "reach_truncated"}) | {
    name for name in CAUSES if name.startswith("band_misfit")
}
"""Causes that follow from bands and risks: judged again rather than taken over from the journal."""


@dataclass(frozen=True, slots=True, kw_only=True)
class PastBar:
    """One journalled bar with its windows. ``confirmed``: the grade that the laboratory found, empty if not known."""

    number: int
    expected: str
    verdict: str
    causes: tuple[str, ...]
    bar: Figures
    windows: tuple[Figures, ...]
    confirmed: str = ""


@dataclass(frozen=True, slots=True, kw_only=True)
class Reviewed:
    """A bar before and after."""

    past: PastBar
    now: Judgement

    @property
    def changed(self) -> bool:
        """Whether the verdict would be another."""
        return self.past.verdict != self.now.verdict


@dataclass(frozen=True, slots=True, kw_only=True)
class Tallied:
    """Counts over reviewed bars. Of bars that the laboratory has confirmed: ``false_alarms`` are of the expected grade
    and were called nonconforming, ``misses`` are of another grade and were called conforming.
    """

    bars: int
    verdicts: Mapping[str, int]
    confirmed: int
    false_alarms: int
    misses: int


def joined(windows: Sequence[Figures], window_s: float) -> tuple[Figures, ...]:
    """Windows joined to at least ``window_s``: counts and track add up, reach is averaged by track.

    Raises ``ValueError`` unless ``window_s`` is positive.
    """
    if not window_s > 0.0:
        raise ValueError(f"window_s = {window_s!r}: a positive number is needed")
    groups: list[list[Figures]] = []
    for one in windows:
        if groups and one.end_s - groups[-1][0].begin_s <= window_s * 1.01:
            groups[-1].append(one)
        else:
            groups.append([one])
    return tuple(_joined(group) for group in groups)


def _joined(group: Sequence[Figures]) -> Figures:
    if len(group) == 1:
        return group[0]
    track = sum(one.track_m for one in group)
    exposure = sum(one.exposure_m for one in group)
    bursts = sum(one.bursts for one in group)
    frames = sum(one.frames_seen for one in group)
    streaks = sum(one.streaks for one in group)

    def by_track(name: str) -> float:
        known = [(getattr(one, name), one.track_m) for one in group if math.isfinite(getattr(one, name))]
        weight = sum(part for _, part in known)
        return sum(value * part for value, part in known) / weight if weight else math.nan

    reach = by_track("reach_mm")
    half = (by_track("reach_high_mm") - by_track("reach_low_mm")) / 2.0 / math.sqrt(len(group))
    return Figures(
        begin_s=group[0].begin_s,
        end_s=group[-1].end_s,
        frames_seen=frames,
        frames_skipped=sum(one.frames_skipped for one in group),
        streaks=streaks,
        bursts=bursts,
        track_m=track,
        exposure_m=exposure,
        burst_rate_per_m=bursts / exposure if exposure > 0.0 else math.nan,
        burst_rate_low_per_m=math.nan,
        burst_rate_high_per_m=math.nan,
        reach_mm=reach,
        reach_low_mm=reach - half,
        reach_high_mm=reach + half,
        cut_share=by_track("cut_share"),
        reach_truncated=any(one.reach_truncated for one in group),
        streaks_per_frame=streaks / frames if frames else math.nan,
        spark_speed_m_s=by_track("spark_speed_m_s"),
        bursts_listed=sum(one.bursts_listed for one in group),
        streak_peak_dn=by_track("streak_peak_dn"),
        streak_width_px=by_track("streak_width_px"),
    )


def review(
    bars: Iterable[PastBar],
    bands: Mapping[str, Band],
    *,
    false_alarm: float,
    miss: float,
    least_streaks: int,
    window_s: float | None = None,
) -> list[Reviewed]:
    """Judge every bar again by ``bands`` (by grade). Causes of blindness in the journal hold as they did."""
    found = []
    for past in bars:
        band = bands.get(past.expected)
        others = [one for grade, one in bands.items() if grade != past.expected]
        trial = Trial(band, others, false_alarm=false_alarm, miss=miss, least_streaks=least_streaks)
        windows = past.windows if window_s is None else joined(past.windows, window_s)
        for window in windows or (past.bar,):
            trial.look(window)
        kept = [cause for cause in past.causes if cause not in FOLLOWS]
        found.append(Reviewed(past=past, now=trial.close(past.bar, kept)))
    return found


def tallied(rows: Iterable[tuple[PastBar, str]]) -> Tallied:
    """Count (bar, verdict) pairs."""
    rows = list(rows)
    known = [(past, verdict) for past, verdict in rows if past.confirmed]
    return Tallied(
        bars=len(rows),
        verdicts=dict(Counter(verdict for _, verdict in rows)),
        confirmed=len(known),
        false_alarms=sum(past.confirmed == past.expected and verdict == NONCONFORMING for past, verdict in known),
        misses=sum(past.confirmed != past.expected and verdict == CONFORMING for past, verdict in known),
    )
