"""A rehearsed line from pictures to verdicts: teach four grades, then judge bars of which one in twenty is foreign.

``python -m tests.bench.bench_line [--references 20] [--bars 200] [--expect C45]``. Everything goes through the same
sight, meter, teaching and trial as a station's; bars scatter in hazard, stream, particle size, launch temperature and
force, and the wheel wears by a seventh while the line runs.
"""

from __future__ import annotations

import argparse
import math
import platform
import time
from collections import Counter

import cv2
import numpy as np

from edgewatch.figures.meter import BarDone, BarMeter
from edgewatch.judge.bands import Band
from edgewatch.judge.contrast import contrast
from edgewatch.judge.teaching import find_outliers, reference_bar, teach
from edgewatch.judge.trial import Judgement, Trial
from edgewatch.rehearsal.line import Line
from edgewatch.rehearsal.scene import Scene
from edgewatch.settings import FigureSettings
from edgewatch.sight.optics import Optics
from edgewatch.sight.sight import Sight

OPTICS = Optics(
    width_px=640, height_px=320, mm_per_px=1.5, contact_px=(20.0, 160.0), direction_deg=0.0, exposure_ms=2.5, fps=200.0
)
GRADES = ("C15", "42CrMo4", "C45", "C80")
SPARKS_PER_S = 1500.0
WHEEL_M_S, WORN_M_S = 28.0, 24.0


def seen_bars(line: Line, seed: int) -> list[BarDone]:
    """Every contact that the station finds on this line."""
    scene = Scene(OPTICS, line.conditions(), rng=np.random.default_rng(seed))
    sight, meter = Sight(OPTICS), BarMeter(FigureSettings(), OPTICS)
    found: list[BarDone] = []
    frames = int(line.end_s * OPTICS.fps)
    for number in range(frames):
        picture, _ = scene.frame()
        events = meter.update(sight.look(picture), t_s=number / OPTICS.fps)
        found += [event for event in events if isinstance(event, BarDone)]
    return found + [event for event in meter.close(frames / OPTICS.fps) if isinstance(event, BarDone)]


def make_line(grade: str, bars: int, *, foreign: int, seed: int, worn_m_s: float, contact_s: float) -> Line:
    """A line of this grade."""
    return Line(
        bars=bars,
        foreign=foreign,
        grade=grade,
        foreign_grades=tuple(other for other in GRADES if other != grade),
        contact_s=contact_s,
        pause_s=0.35,
        sparks_per_s=SPARKS_PER_S,
        wheel_speed_m_s=WHEEL_M_S,
        worn_speed_m_s=worn_m_s,
        rng=np.random.default_rng(seed),
    )


def teach_grade(grade: str, references: int, seed: int, contact_s: float) -> Band:
    """A band from pictures of reference bars."""
    line = make_line(grade, references, foreign=0, seed=seed, worn_m_s=WHEEL_M_S, contact_s=contact_s)
    contacts = seen_bars(line, seed + 1)
    bars = [reference_bar(number, grade, one.bar, one.windows) for number, one in enumerate(contacts, 1)]
    outliers = [one.number for one in find_outliers(bars)]
    band = teach(grade, bars, optics=OPTICS)
    truth = [line[k].steel.hazard_per_m for k in range(references)]
    reach = f"{band.reach_low_mm:.0f} to {band.reach_high_mm:.0f} mm" if band.has_reach else "none"
    print(
        f"  {grade}: {len(bars)} of {references} contacts; burst-rate {band.burst_rate_low_per_m:.3f} to "
        f"{band.burst_rate_high_per_m:.3f}, centre {band.rate_center_per_m:.3f} (true hazard "
        f"{math.exp(float(np.mean(np.log(truth)))):.3f}), scatter {band.rate_scatter:.3f}, dispersion "
        f"{band.rate_dispersion:.2f}; reach {reach}; sparks {band.spark_speed_m_s:.1f} m/s; outliers {outliers}",
        flush=True,
    )
    return band


def judge(bar: BarDone, band: Band, bands: list[Band]) -> Judgement:
    """The verdict of one contact."""
    trial = Trial(band, bands)
    for one in bar.windows:
        trial.look(one)
    return trial.close(bar.bar)


def main() -> None:
    """Print the tables."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--references", type=int, default=20)
    parser.add_argument("--bars", type=int, default=200)
    parser.add_argument("--expect", default="C45", choices=GRADES)
    parser.add_argument("--contact-s", type=float, default=0.9)
    options = parser.parse_args()
    print(f"{platform.machine()}, Python {platform.python_version()}, OpenCV {cv2.__version__}, numpy {np.__version__}")
    begun = time.perf_counter()
    bands = [teach_grade(grade, options.references, 10 * k, options.contact_s) for k, grade in enumerate(GRADES, 1)]
    expected = bands[GRADES.index(options.expect)]
    apart = {}
    for pair in contrast(bands, miss=0.01, track_m_s=expected.track_m / expected.bars_used / options.contact_s):
        if pair.expected == options.expect:
            apart[pair.actual] = pair.told_apart
            print(f"  against {pair.actual}: told apart {pair.told_apart}, after {pair.seconds:.2f} s", flush=True)
    line = make_line(
        options.expect,
        options.bars,
        foreign=options.bars // 20,
        seed=99,
        worn_m_s=WORN_M_S,
        contact_s=options.contact_s,
    )
    counts: Counter[tuple[str, str]] = Counter()
    contacts = seen_bars(line, 100)
    for one in contacts:
        middle = 0.5 * (one.begin_s + one.end_s)
        truth = min(
            (line[k] for k in range(options.bars)), key=lambda bar: abs(0.5 * (bar.begin_s + bar.end_s) - middle)
        )
        found = judge(one, expected, bands)
        counts[truth.grade if truth.foreign else "good", found.verdict] += 1
        if truth.foreign or found.verdict != "conforming":
            print(
                f"  bar {truth.number}: {truth.grade}, hazard {truth.steel.hazard_per_m:.3f}, measured "
                f"{one.bar.burst_rate_per_m:.3f}, reach {found.reach_mm:.0f} mm at the taught speed: {found.verdict} "
                f"{found.figure} {', '.join(found.causes)} after {found.decided_after_s:.2f} s",
                flush=True,
            )
    print(f"{len(contacts)} contacts of {options.bars} bars; {time.perf_counter() - begun:.0f} s")
    for (grade, verdict), count in sorted(counts.items()):
        print(f"  {grade} {verdict}: {count}")


if __name__ == "__main__":
    main()
