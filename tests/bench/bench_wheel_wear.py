"""Verdicts while the wheel wears to two thirds of its diameter, and over a twofold change of grinding force.

At the level of figures, not pictures: each bar's stream is flown particle by particle, seen by a perfect sight, cut
into windows, and judged by the station's own trial. Run: ``python -m tests.bench.bench_wheel_wear [bars]``.
"""

from __future__ import annotations

import math
import platform
import sys
from collections import Counter
from dataclasses import dataclass, replace
from functools import lru_cache

import numpy as np
import scipy

from edgewatch.figures import wear
from edgewatch.figures.limits import poisson_limits
from edgewatch.figures.values import Figures
from edgewatch.judge.bands import Band
from edgewatch.judge.teaching import reference_bar, teach
from edgewatch.judge.trial import Trial
from edgewatch.rehearsal.line import Bar, Line, Scatter
from edgewatch.rehearsal.outline import Outline, outline_windows
from edgewatch.sight.optics import Optics

OPTICS = Optics(
    width_px=1280, height_px=800, mm_per_px=1.0, contact_px=(30.0, 400.0), direction_deg=0.0, exposure_ms=2.5, fps=200.0
)
FULL_M_S, WORN_M_S = 30.0, 20.0
"""Surface speed of a full wheel, and at two thirds of its diameter at the same turns."""
CONTACT_S, WINDOW_S = 1.25, 0.25
SPARKS = 1500
"""Particles flown for a bar at usual force: they give about the bursts that 200 exposures a second of 2.5 ms show."""
USUAL_SPARKS_S = 4000.0
FALSE_ALARM = 0.001


@dataclass(frozen=True)
class Seen:
    """One bar: what it is, and the figures of its windows."""

    bar: Bar
    windows: tuple[Figures, ...]
    whole: Figures


def figures(part: Outline, begin_s: float, end_s: float) -> Figures:
    """Figures of a stretch as the station would have them."""
    low, high = poisson_limits(part.bursts, part.track_m)
    return Figures(
        begin_s=begin_s,
        end_s=end_s,
        frames_seen=round((end_s - begin_s) * OPTICS.fps),
        frames_skipped=0,
        streaks=round(part.track_m / 0.055),
        bursts=part.bursts,
        track_m=part.track_m,
        exposure_m=part.track_m,
        burst_rate_per_m=part.burst_rate_per_m,
        burst_rate_low_per_m=low,
        burst_rate_high_per_m=high,
        reach_mm=part.reach_mm,
        reach_low_mm=math.nan,
        reach_high_mm=math.nan,
        cut_share=0.0,
        reach_truncated=False,
        streaks_per_frame=part.track_m / 0.055 / ((end_s - begin_s) * OPTICS.fps),
        spark_speed_m_s=part.spark_speed_m_s,
    )


def look_at(bar: Bar, rng: np.random.Generator, *, force: float = 1.0) -> Seen:
    """Fly one bar's stream; ``force`` multiplies the sparks."""
    rate = bar.sparks_per_s * force
    count = max(1, round(SPARKS * rate / USUAL_SPARKS_S))
    number = round(CONTACT_S / WINDOW_S)
    parts = outline_windows(
        bar.steel, sparks=count, windows=number, wheel_speed_m_s=bar.wheel_speed_m_s, sparks_per_s=rate, rng=rng
    )
    windows = tuple(figures(part, k * WINDOW_S, (k + 1) * WINDOW_S) for k, part in enumerate(parts))
    bursts, track = sum(part.bursts for part in parts), sum(part.track_m for part in parts)
    low, high = poisson_limits(bursts, track)
    whole = replace(
        windows[0],
        end_s=CONTACT_S,
        frames_seen=round(CONTACT_S * OPTICS.fps),
        bursts=bursts,
        track_m=track,
        exposure_m=track,
        streaks=sum(w.streaks for w in windows),
        burst_rate_per_m=bursts / track if track else math.nan,
        burst_rate_low_per_m=low,
        burst_rate_high_per_m=high,
        reach_mm=float(np.mean([part.reach_mm for part in parts])),
        spark_speed_m_s=float(np.median([part.spark_speed_m_s for part in parts])),
    )
    return Seen(bar, windows, whole)


def make_line(
    bars: int, seed: int, *, grade: str, foreign: int = 0, worn_m_s: float = FULL_M_S, **scatter: float
) -> Line:
    """A line from a full wheel on; foreign bars of four grades in turn."""
    return Line(
        bars=bars,
        foreign=foreign,
        grade=grade,
        foreign_grades=("C15", "C80", "C25", "C60"),
        contact_s=CONTACT_S,
        wheel_speed_m_s=FULL_M_S,
        worn_speed_m_s=worn_m_s,
        scatter=replace(Scatter(), **scatter),
        rng=np.random.default_rng(seed),
    )


@lru_cache(maxsize=32)
def teach_grade(grade: str, bars: int, seed: int) -> Band:
    """A band from reference bars on a full wheel."""
    rng = np.random.default_rng(seed)
    line = make_line(bars, seed, grade=grade)
    references = []
    for k in range(bars):
        seen = look_at(line[k], rng)
        references.append(reference_bar(k + 1, "bench", seen.whole, seen.windows))
    return teach(grade, references, optics=OPTICS, wheel_speed_m_s=FULL_M_S)


def judge(seen: Seen, band: Band, others: list[Band], *, compensate: str) -> tuple[str, float, float]:
    """Verdict, factor used, log evidence. ``compensate``: ``no``, by the ``wheel`` speed told, or by the ``sparks``."""
    factor = 1.0
    if compensate == "wheel":
        factor = wear.reach_factor(taught_wheel_m_s=band.wheel_speed_m_s, wheel_m_s=seen.bar.wheel_speed_m_s)
    elif compensate == "sparks":
        factor = wear.reach_factor(taught_spark_m_s=band.spark_speed_m_s, spark_m_s=seen.whole.spark_speed_m_s)
    trial = Trial(band, others, false_alarm=FALSE_ALARM, reach_factor=lambda _: factor)
    for window in seen.windows:
        trial.look(window)
    verdict = trial.close(seen.whole)
    return verdict.verdict, factor, verdict.log_evidence


@dataclass(frozen=True)
class Row:
    """Verdicts of one way of judging over one part of the wheel's life."""

    way: str
    part: str
    good: int
    false_alarms: int
    good_inconclusive: int
    foreign: int
    caught: int
    passed: int
    reach_shift: float
    by_grade: tuple[tuple[str, str, int], ...]


def wear_table(bars: int, *, teach_bars: int = 40, foreign_share: float = 0.1, seed: int = 1) -> list[Row]:
    """Judge a line while the wheel wears, without and with compensation, by thirds of its life and as a whole."""
    bands = {
        name: teach_grade(name, teach_bars, seed + k) for k, name in enumerate(("C45", "C15", "C25", "C60", "C80"))
    }
    band = bands.pop("C45")
    others = list(bands.values())
    line = make_line(bars, seed + 100, grade="C45", foreign=round(foreign_share * bars), worn_m_s=WORN_M_S)
    rng = np.random.default_rng(seed + 200)
    found: dict[tuple[str, str], list[tuple[str, str, float]]] = {}
    parts = ("first third", "middle third", "last third")
    for k in range(bars):
        seen = look_at(line[k], rng)
        for way in ("no", "wheel", "sparks"):
            verdict, factor, _ = judge(seen, band, others, compensate=way)
            shift = seen.whole.reach_mm * factor / (band.reach_center_mm or math.nan) - 1.0
            for part in (parts[min(2, 3 * k // bars)], "whole life"):
                found.setdefault((way, part), []).append((seen.bar.grade if seen.bar.foreign else "", verdict, shift))
    rows = []
    for (way, part), verdicts in found.items():
        good = Counter(verdict for foreign, verdict, _ in verdicts if not foreign)
        bad = Counter(verdict for foreign, verdict, _ in verdicts if foreign)
        grades = Counter((foreign, verdict) for foreign, verdict, _ in verdicts if foreign)
        rows.append(
            Row(
                way=way,
                part=part,
                good=sum(good.values()),
                false_alarms=good["nonconforming"],
                good_inconclusive=good["inconclusive"],
                foreign=sum(bad.values()),
                caught=bad["nonconforming"],
                passed=bad["conforming"],
                reach_shift=float(np.median([shift for foreign, _, shift in verdicts if not foreign])),
                by_grade=tuple((grade, verdict, count) for (grade, verdict), count in sorted(grades.items())),
            )
        )
    return sorted(
        rows, key=lambda row: (("no", "wheel", "sparks").index(row.way), [*parts, "whole life"].index(row.part))
    )


@dataclass(frozen=True)
class ForceRow:
    """Bars of the right grade pressed on with another force."""

    force: float
    bars: int
    reach_shift: float
    rate_shift: float
    false_alarms: int
    inconclusive: int
    evidence_median: float
    evidence_99: float


def force_table(bars: int, *, teach_bars: int = 40, seed: int = 1) -> list[ForceRow]:
    """Judge good bars at half, usual and twice the force (and its roots); the band was taught at usual force."""
    bands = {
        name: teach_grade(name, teach_bars, seed + k) for k, name in enumerate(("C45", "C15", "C25", "C60", "C80"))
    }
    band = bands.pop("C45")
    rows = []
    for force in (0.5, 0.5**0.5, 1.0, 2.0**0.5, 2.0):
        line = make_line(bars, seed + 300, grade="C45")
        rng = np.random.default_rng(seed + 400)
        seen = [look_at(line[k], rng, force=force) for k in range(bars)]
        verdicts = [judge(one, band, list(bands.values()), compensate="no") for one in seen]
        evidence = np.array([value for _, _, value in verdicts])
        rows.append(
            ForceRow(
                force=force,
                bars=bars,
                reach_shift=float(
                    np.median([one.whole.reach_mm for one in seen]) / (band.reach_center_mm or math.nan) - 1.0
                ),
                rate_shift=float(
                    np.median([one.whole.burst_rate_per_m for one in seen]) / band.rate_center_per_m - 1.0
                ),
                false_alarms=sum(verdict == "nonconforming" for verdict, _, _ in verdicts),
                inconclusive=sum(verdict == "inconclusive" for verdict, _, _ in verdicts),
                evidence_median=float(np.median(evidence)),
                evidence_99=float(np.percentile(evidence, 99)),
            )
        )
    return rows


def main() -> None:
    """Print both tables."""
    bars = int(sys.argv[1]) if len(sys.argv) > 1 else 2000
    print(
        f"{platform.machine()} {platform.system()}, Python {platform.python_version()}, numpy {np.__version__}, "
        f"scipy {scipy.__version__}; {bars} bars, seeds fixed, false_alarm {FALSE_ALARM}"
    )
    print(f"wheel {FULL_M_S:g} -> {WORN_M_S:g} m/s")
    print("compensation  part of life    good  false  incon.  foreign  caught  passed  reach shift")
    rows = wear_table(bars)
    for row in rows:
        print(
            f"{row.way:12s}  {row.part:14s}  {row.good:4d}  {row.false_alarms:5d}  {row.good_inconclusive:6d}  "
            f"{row.foreign:7d}  {row.caught:6d}  {row.passed:6d}  {100 * row.reach_shift:+10.1f} %"
        )
    for row in rows:
        if row.part == "whole life":
            verdicts = ", ".join(f"{grade} {verdict} {count}" for grade, verdict, count in row.by_grade)
            print(f"foreign bars, compensation {row.way}: {verdicts}")
    print(
        "force  bars  reach shift  rate shift  false  incon.  evidence median  99 % (limit "
        f"{-math.log(FALSE_ALARM):.2f})"
    )
    for line in force_table(max(20, bars // 5)):
        print(
            f"{line.force:5.2f}  {line.bars:4d}  {100 * line.reach_shift:+9.1f} %  {100 * line.rate_shift:+8.1f} %  "
            f"{line.false_alarms:5d}  {line.inconclusive:6d}  {line.evidence_median:15.2f}  {line.evidence_99:5.2f}"
        )


if __name__ == "__main__":
    main()
