"""The trial of one bar: looked at after every window, closed when the contact ends."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass

from edgewatch.figures.values import Figures
from edgewatch.judge.bands import Band
from edgewatch.judge.causes import BLIND
from edgewatch.judge.contrast import told_apart
from edgewatch.judge.counts import at_least, at_most
from edgewatch.judge.evidence import RateEvidence, ReachEvidence, log_sum
from edgewatch.judge.likeness import Evidence, nearest, reach_at_taught_speed, wear_factor
from edgewatch.judge.separation import excluded

CONFORMING = "conforming"
NONCONFORMING = "nonconforming"
INCONCLUSIVE = "inconclusive"
FOREIGN_RATIO = 4.0
"""Where no other grade is taught that could be told apart, a foreign bar is one whose hazard is this many times above
or below the band: `conforming` is said only if the evidence would have shown such a bar."""
FEW_FRAMES = 0.5
"""A window with less than this share of the frames of the bar's fullest window gives no reach."""

RATE = "burst_rate"
REACH = "reach"


@dataclass(frozen=True, slots=True, kw_only=True)
class Standing:
    """After a look: ``nonconforming`` once and for ever; ``log_evidence`` (natural) against the whole band, to hold
    against ``threshold``; ``decided_after_s`` seconds of contact at which it was condemned, else NaN.
    """

    nonconforming: bool
    figure: str
    log_evidence: float
    threshold: float
    decided_after_s: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Judgement:
    """Verdict of one bar. ``decided_after_s``: seconds of contact until a nonconforming bar was condemned, else the
    whole contact. ``causes``: why it is inconclusive, or what was noticed besides. ``figure``: by which figure it was
    condemned (``burst_rate``, ``reach`` or empty). ``nearest``: taught grades with weights. ``bursts``, ``exposure_m``,
    ``reach_mm``: the evidence used, reach at the taught wheel speed. ``refused``: windows whose figures were no use.
    """

    verdict: str
    decided_after_s: float
    causes: tuple[str, ...]
    figure: str
    nearest: tuple[tuple[str, float], ...]
    log_evidence: float
    threshold: float
    bursts: int
    exposure_m: float
    reach_mm: float
    refused: int


def usable(window: Figures) -> bool:
    """Whether a window's figures are finite and not negative where they must be."""
    return (
        math.isfinite(window.begin_s)
        and math.isfinite(window.end_s)
        and math.isfinite(window.track_m)
        and math.isfinite(window.exposure_m)
        and window.track_m >= 0.0
        and window.exposure_m >= 0.0
        and window.bursts >= 0
        and window.streaks >= 0
        and not window.reach_mm < 0.0
        and not math.isinf(window.reach_mm)
    )


class Trial:
    """Judges one bar against ``band``; ``others`` are all other taught bands.

    ``false_alarm``: highest probability that a bar inside its band is ever called nonconforming. ``miss``: highest
    probability that a bar of another taught grade, one that can be told apart, is called conforming.
    ``misfit``: causes why the band does not fit the station (``Band.misfit``). ``wheel_m_s``: surface speed as
    configured or ordered, for wear compensation where the sparks do not tell their speed; NaN or 0: not known.
    ``reach_factor``: instead of that, what a window's reach must be multiplied by to hold at the taught speed, from
    whoever follows the wheel over many bars.
    Raises ``ValueError`` on risks out of range.
    """

    def __init__(
        self,
        band: Band | None,
        others: Sequence[Band] = (),
        *,
        false_alarm: float = 0.001,
        miss: float = 0.01,
        least_streaks: int = 50,
        misfit: Sequence[str] = (),
        wheel_m_s: float = math.nan,
        reach_factor: Callable[[Figures], float] | None = None,
    ) -> None:
        for name, risk in (("false_alarm", false_alarm), ("miss", miss)):
            if not 0.0 < risk < 1.0:
                raise ValueError(f"{name} = {risk!r}: between 0 and 1")
        self._band = band
        self._others = tuple(one for one in others if band is None or one.grade != band.grade)
        self._miss = miss
        self._least_streaks = least_streaks
        self._misfit = tuple(misfit)
        self._wheel_m_s = wheel_m_s
        self._reach_factor = reach_factor
        self._threshold = -math.log(false_alarm)
        self._rate = RateEvidence(band) if band and not misfit else None
        self._reach = ReachEvidence(band) if band and not misfit else None
        self._bursts = 0
        self._exposure_m = 0.0
        self._reach_sum = 0.0
        self._reach_track_m = 0.0
        self._speed_sum = 0.0
        self._speed_track_m = 0.0
        self._looks = 0
        self._most_frames = 0
        self._last: Figures | None = None
        self._begin_s = math.nan
        self._end_s = math.nan
        self._causes: dict[str, None] = {}
        self._refused = 0
        self._standing = self._stand(False, "", math.nan)

    @property
    def standing(self) -> Standing:
        """As of the last look."""
        return self._standing

    def _stand(self, condemned: bool, figure: str, after_s: float) -> Standing:
        return Standing(
            nonconforming=condemned,
            figure=figure,
            log_evidence=self._log_evidence()[0],
            threshold=self._threshold,
            decided_after_s=after_s,
        )

    def _log_evidence(self) -> tuple[float, str]:
        """Log of the whole evidence against the band, and the figure that carries most of it."""
        if self._rate is None or self._reach is None or self._band is None:
            return -math.inf, ""
        rate = log_sum(list(self._rate.sides(self._bursts, self._exposure_m)))
        if not self._reach.usable:
            return rate, RATE
        wheel_m_s = math.nan if self._reach_factor else self._wheel_m_s
        factor = wear_factor(self._band, spark_m_s=self._spark_m_s(), wheel_m_s=wheel_m_s)
        reach = log_sum(list(self._reach.sides(self._reach_sum * factor, self._reach_track_m)))
        return log_sum([rate, reach]), RATE if rate >= reach else REACH

    def look(self, window: Figures, causes: Sequence[str] = ()) -> Standing:
        """Take one window. ``causes`` that hold during it: while the station cannot see, it is not used as evidence.

        Windows that are not finite or are negative are refused and counted. Cost: a few microseconds.
        """
        self._causes.update(dict.fromkeys(causes))
        if not usable(window):
            self._refused += 1
            return self._standing
        self._begin_s = window.begin_s if math.isnan(self._begin_s) else self._begin_s
        self._end_s = window.end_s
        if BLIND.intersection(causes):
            self._last = None
            return self._standing
        self._bursts += window.bursts
        self._exposure_m += window.exposure_m
        self._take_settled_reach(window)
        if not self._standing.nonconforming:
            evidence, figure = self._log_evidence()
            condemned = evidence >= self._threshold
            self._standing = Standing(
                nonconforming=condemned,
                figure=figure if condemned else "",
                log_evidence=evidence,
                threshold=self._threshold,
                decided_after_s=self._end_s - self._begin_s if condemned else math.nan,
            )
        return self._standing

    def _take_settled_reach(self, window: Figures) -> None:
        """Use the reach of the window before this one. Not of the first: the stream was filling. Not of one of few
        frames: it scatters more than its track says, because a spark is in several frames that follow each other.
        """
        before, self._last = self._last, window
        self._looks += 1
        self._most_frames = max(self._most_frames, window.frames_seen)
        if before is None or self._looks <= 2 or not before.reach_mm > 0.0 or before.reach_truncated:
            return
        if before.frames_seen < FEW_FRAMES * self._most_frames:
            return
        factor = self._reach_factor(before) if self._reach_factor else 1.0
        if not (math.isfinite(factor) and factor > 0.0):
            return
        self._reach_sum += before.track_m * before.reach_mm * factor
        self._reach_track_m += before.track_m
        if self._reach_factor is None and before.spark_speed_m_s > 0.0 and math.isfinite(before.spark_speed_m_s):
            self._speed_sum += before.track_m * before.spark_speed_m_s
            self._speed_track_m += before.track_m

    def _spark_m_s(self) -> float:
        return self._speed_sum / self._speed_track_m if self._speed_track_m > 0.0 else math.nan

    def evidence(self) -> Evidence:
        """What the bar has shown so far."""
        reach = self._reach_sum / self._reach_track_m if self._reach_track_m > 0.0 else math.nan
        return Evidence(
            bursts=self._bursts,
            exposure_m=self._exposure_m,
            reach_mm=reach,
            reach_track_m=self._reach_track_m,
            spark_m_s=self._spark_m_s(),
            wheel_m_s=math.nan if self._reach_factor else self._wheel_m_s,
        )

    def nearest(self) -> tuple[tuple[str, float], ...]:
        """Taught grades with weights, as of the last look."""
        bands = ([self._band] if self._band else []) + list(self._others)
        return nearest(bands, self.evidence())

    def close(self, bar: Figures, causes: Sequence[str] = ()) -> Judgement:
        """The contact has ended: the verdict. ``bar``: figures of the whole contact; ``causes`` held during it."""
        self._causes.update(dict.fromkeys(causes))
        verdict, found = self._verdict(bar)
        standing = self._standing
        seconds = bar.end_s - bar.begin_s
        evidence = self.evidence()
        return Judgement(
            verdict=verdict,
            decided_after_s=standing.decided_after_s if verdict == NONCONFORMING else seconds,
            causes=tuple(dict.fromkeys([*self._causes, *found])),
            figure=standing.figure if verdict == NONCONFORMING else "",
            nearest=self.nearest(),
            log_evidence=standing.log_evidence,
            threshold=self._threshold,
            bursts=evidence.bursts,
            exposure_m=evidence.exposure_m,
            reach_mm=reach_at_taught_speed(self._band, evidence) if self._band else evidence.reach_mm,
            refused=self._refused,
        )

    def _verdict(self, bar: Figures) -> tuple[str, list[str]]:
        """Verdict and the causes for it."""
        found = ["figures_refused"] if self._refused or not usable(bar) else []
        if self._band is None:
            return INCONCLUSIVE, [*found, "no_band"]
        if self._misfit:
            return INCONCLUSIVE, [*found, *self._misfit]
        cut = self._band.has_reach and bar.reach_truncated
        if cut:
            found.append("reach_truncated")
        if self._standing.nonconforming and not (cut and self._standing.figure == REACH):
            return NONCONFORMING, found
        if found or self._causes:
            return INCONCLUSIVE, found
        if bar.streaks < self._least_streaks:
            return INCONCLUSIVE, ["too_few_streaks"]
        short = self._short_of()
        return (INCONCLUSIVE, short) if short else (CONFORMING, [])

    def _short_of(self) -> list[str]:
        """Why the evidence would not have shown a foreign bar; empty if it would have."""
        band, evidence = self._band, self.evidence()
        assert band is not None
        if not evidence.exposure_m > 0.0:
            return ["evidence_short"]
        foreign = [other for other in self._others if told_apart(band, other, self._miss)]
        if not foreign:
            return [] if self._shows_ratio(band, evidence.exposure_m) else ["evidence_short"]
        like = [other for other in foreign if not excluded(other, band, evidence, miss=self._miss)]
        return ["resembles_other"] if like else []

    def _shows_ratio(self, band: Band, exposure_m: float) -> bool:
        """Whether a bar ``FOREIGN_RATIO`` times off the band would by now have given a count that is less likely than
        ``miss`` for the band's edge, and the other way round.
        """
        low, high = band.burst_rate_low_per_m * exposure_m, band.burst_rate_high_per_m * exposure_m
        spread = band.rate_dispersion
        limit = int(high)
        while float(at_least(limit + 1, high, spread)) > self._miss:
            limit += max(1, int(0.1 * math.sqrt(high)))
        if float(at_most(limit, FOREIGN_RATIO * high, spread)) > self._miss:
            return False
        if low <= 0.0:
            return True
        limit = int(low)
        while limit >= 0 and float(at_most(limit - 1, low, spread)) > self._miss:
            limit -= max(1, int(0.1 * math.sqrt(low)))
        return limit >= 0 and float(at_least(limit, low / FOREIGN_RATIO, spread)) <= self._miss
