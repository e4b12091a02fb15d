"""How well and how fast the sight sees: tables of accuracy, hazard, false bursts, dark scenes, and speed.

``python -m tests.bench.bench_sight [accuracy|crossing|dark|hazard|speed …] [--scale F]``; all parts without a name.
Two judges: the rehearsal (``r``) and the independent renderer of ``tests/scenes.py`` (``m``), with seeds that neither
tuning nor learning used. Speed is the processor time of one thread, all ways interleaved on the same pictures.
"""

from __future__ import annotations

import argparse
import math
import os
import platform
import time
from collections.abc import Iterator
from dataclasses import dataclass, field, replace

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")  # before numpy wakes it

import cv2
import numpy as np
import scipy
from numpy.typing import NDArray

from edgewatch.figures.meter import BarMeter
from edgewatch.rehearsal.camera import CameraModel
from edgewatch.rehearsal.scene import Stream as RehearsalStream
from edgewatch.rehearsal.steel import find_steel
from edgewatch.settings import FigureSettings
from edgewatch.sight import Sight
from edgewatch.sight.optics import Optics
from tests.scenes import JUDGE_SEED, Look, Scene, Stream, crossing_lines
from tests.scoring import LEAST_LENGTH_PX, LEAST_SNR, Score, far, match_bursts, match_streaks, middles

LEAST_DRAW_MS = 0.35


def make_optics(
    *, width: int = 640, height: int = 400, mm: float = 1.0, degrees: float = 0.0, ms: float = 2.5, fps: float = 200.0
) -> Optics:
    """A camera that looks at the stream from its beginning on, whatever way it flies."""
    c, s = math.cos(math.radians(degrees)), math.sin(math.radians(degrees))
    inset = 20.0 / mm
    return Optics(
        width_px=width,
        height_px=height,
        mm_per_px=mm,
        contact_px=(width / 2 - c * (width / 2 - inset), height / 2 - s * (height / 2 - inset)),
        direction_deg=degrees,
        exposure_ms=ms,
        fps=fps,
    )


@dataclass(frozen=True, kw_only=True)
class Shot:
    """One picture and its truth, whichever judge drew it."""

    picture: NDArray[np.uint8]
    streaks: NDArray[np.float64]
    bursts: NDArray[np.float64]
    late: NDArray[np.bool_]
    track_px: float
    struck: int  # bursts that went off during this exposure


@dataclass(frozen=True, kw_only=True)
class Case:
    """One row of a table."""

    name: str
    optics: Optics
    hazard_per_m: float = 0.9
    sparks_per_s: float = 4000.0
    camera: CameraModel = field(default_factory=CameraModel)
    look: Look = field(default_factory=Look)
    stream: Stream = field(default_factory=Stream)


def shots(case: Case, judge: str, count: int, seed: int) -> Iterator[Shot]:
    """``count`` pictures of a case from one judge."""
    rng = np.random.default_rng([JUDGE_SEED, seed])
    if judge == "r":
        grade = "C15" if case.hazard_per_m < 0.3 else "C45" if case.hazard_per_m < 1.5 else "C80"
        steel = replace(find_steel(grade), hazard_per_m=case.hazard_per_m)
        source = RehearsalStream(case.optics, steel, rng=rng, sparks_per_s=case.sparks_per_s, camera=case.camera)
        listed: set[int] = set()
        for _ in range(count):
            picture, truth = source.frame()
            drawn = truth.drew_ms >= LEAST_DRAW_MS
            new = np.array([d and int(i) not in listed for d, i in zip(drawn, truth.burst_id, strict=True)], np.bool_)
            listed.update(int(i) for i in truth.burst_id[drawn])
            yield Shot(
                picture=picture,
                streaks=_scored(truth.streaks.astype(np.float64), truth.streak_snr),
                bursts=truth.bursts[new].astype(np.float64).reshape(-1, 2),
                late=truth.late[new],
                track_px=truth.track_exposed_m * 1e3 / case.optics.mm_per_px,
                struck=int((truth.first & ~truth.late).sum()),
            )
        return
    stream = replace(case.stream, hazard_per_m=case.hazard_per_m, sparks_per_s=case.sparks_per_s * 0.625)
    scene = Scene(case.optics, stream, case.look, JUDGE_SEED + seed, (count + 0.5) / case.optics.fps)
    for picture, own in scene:
        yield Shot(
            picture=picture,
            streaks=_scored(own.streaks, own.snr),
            bursts=own.bursts,
            late=own.late,
            track_px=own.track_px,
            struck=own.struck,
        )


def _scored(lines: NDArray[np.float64], snr: NDArray[np.floating]) -> NDArray[np.float64]:
    length = np.hypot(*(lines[:, 2:] - lines[:, :2]).T)
    return lines[(snr >= LEAST_SNR) & (length > LEAST_LENGTH_PX)]


def cases() -> list[Case]:
    """The scenes of the accuracy table."""
    plain = make_optics()
    shaken = CameraModel(vibration_px=1.5, hot_pixels=40, defocus_px=1.2)
    return [
        Case(name="low carbon", optics=plain, hazard_per_m=0.1),
        Case(name="medium carbon", optics=plain),
        Case(name="high carbon", optics=plain, hazard_per_m=2.2),
        Case(name="7000 sparks/s", optics=plain, sparks_per_s=7000.0),
        Case(
            name="haze, flicker",
            optics=plain,
            camera=CameraModel(haze_dn=40.0, flicker=0.4),
            look=Look(haze_dn=40.0, flicker_dn=12.0),
        ),
        Case(name="JPEG 70", optics=plain, camera=CameraModel(jpeg_quality=70), look=Look(jpeg=70)),
        Case(
            name="vibration, hot px",
            optics=plain,
            camera=shaken,
            look=Look(shake_px=1.5, hot_pixels=40, spread_px=1.4),
        ),
        Case(name="half light", optics=plain, camera=CameraModel(light=0.5), look=Look(gain=0.5)),
        Case(name="to the left", optics=make_optics(degrees=180.0)),
        Case(name="down", optics=make_optics(degrees=90.0)),
        Case(name="at 37 degrees", optics=make_optics(degrees=37.0)),
        Case(name="60 fps, 8 ms", optics=make_optics(ms=8.0, fps=60.0)),
        Case(name="1000 fps, 0.9 ms", optics=make_optics(ms=0.9, fps=1000.0)),
        Case(name="1280x800, 0.5 mm", optics=make_optics(width=1280, height=800, mm=0.5)),
        Case(
            name="sharp, noisy",
            optics=plain,
            camera=CameraModel(psf_sigma_px=0.65, read_noise_e=40.0),
            look=Look(spread_px=0.7, noise_dn=4.0),
        ),
        Case(name="gamma", optics=plain, camera=CameraModel(gamma=1.8), look=Look(gamma=0.6)),
        Case(
            name="wide arms, even line",
            optics=plain,
            camera=CameraModel(),
            look=Look(per_length=True),
            stream=Stream(kick=0.9, arm_glow_s=0.0025),
        ),
    ]


def score(case: Case, judge: str, count: int, seed: int) -> tuple[Score, Score]:
    """Streaks and bursts of one case."""
    sight, streaks, bursts = Sight(case.optics), Score(), Score()
    contact = case.optics.contact_px
    for shot in shots(case, judge, count, seed):
        seen = sight.look(shot.picture)
        truth = shot.streaks[far(middles(shot.streaks), contact)]
        lines = seen.streaks[far(middles(seen.streaks), contact)]
        streaks.add(len(match_streaks(truth, lines)), len(truth), len(lines))
        real, found = shot.bursts[far(shot.bursts, contact)], seen.bursts[far(seen.bursts, contact)]
        bursts.add(len(match_bursts(real, found)), len(real), len(found))
    return streaks, bursts


def accuracy(scale: float) -> None:
    """Precision, recall and F1 of streaks and bursts."""
    print("\naccuracy (60 px about the contact left out; precision recall F1 of streaks, then of bursts, their number)")
    for judge in "rm":
        for case in cases():
            fast = case.optics.fps / 200.0
            count = max(8, round(40 * scale * min(4.0, max(0.5, fast)) / (4 if case.optics.width_px > 640 else 1)))
            s, b = score(case, judge, count, 15)
            print(
                f"{judge} {case.name:22s} {s.precision:.3f} {s.recall:.3f} {s.f1:.3f}   "
                f"{b.precision:.3f} {b.recall:.3f} {b.f1:.3f}  {b.found + b.missed:4d}",
                flush=True,
            )


def crossing(scale: float) -> None:
    """Two and three crossing lines: false bursts per crossing."""
    print("\ncrossing lines (false bursts per crossing)")
    optics, look = make_optics(), Look()
    rng = np.random.default_rng([JUDGE_SEED, 5])
    for angle in (5.0, 10.0, 20.0, 30.0, 45.0, 60.0, 90.0):
        false = total = 0
        for _ in range(max(5, round(25 * scale))):
            sight = Sight(optics)  # a fresh sight: every picture is other lines, not the same stream
            false += len(sight.look(crossing_lines(optics, look, rng, angle_deg=angle)).bursts)
            total += 12
        print(f"{angle:5.0f} degrees  {false / total:.4f}  ({false} of {total})", flush=True)


def dark(scale: float) -> None:
    """A dark scene with flicker, haze and hot pixels: nothing must be seen."""
    count = max(50, round(1000 * scale))
    print(f"\ndark scene, {count} pictures with flicker, haze and hot pixels (streaks, bursts seen)")
    camera = CameraModel(haze_dn=30.0, flicker=0.4, hot_pixels=60)
    source = RehearsalStream(
        make_optics(), find_steel("C45"), rng=np.random.default_rng(JUDGE_SEED), sparks_per_s=0.0, camera=camera
    )
    sight = Sight(make_optics())
    streaks = bursts = 0
    for _ in range(count):
        seen = sight.look(source.frame()[0])
        streaks, bursts = streaks + len(seen.streaks), bursts + len(seen.bursts)
    print(f"r  streaks {streaks}, bursts {bursts}", flush=True)
    own = Look(haze_dn=30.0, flicker_dn=12.0, hot_pixels=60)
    sight, streaks, bursts = Sight(make_optics()), 0, 0
    for picture, _ in Scene(make_optics(), Stream(sparks_per_s=0.0), own, JUDGE_SEED, (count + 0.5) / 200.0):
        seen = sight.look(picture)
        streaks, bursts = streaks + len(seen.streaks), bursts + len(seen.bursts)
    print(f"m  streaks {streaks}, bursts {bursts}", flush=True)


def measured_rate(case: Case, judge: str, count: int, seed: int) -> tuple[float, int, float]:
    """Burst-rate (1/m), bursts counted, and bursts that really went off per metre of track (in r on the track on which
    the hazard acts; in m on all track, and there no spark bursts twice, so it falls behind a high hazard).
    """
    sight, bursts, exposure_px, struck, track_px = Sight(case.optics), 0, 0.0, 0, 0.0
    for shot in shots(case, judge, count, seed):
        seen = sight.look(shot.picture)
        bursts += seen.rate_bursts
        exposure_px += seen.rate_exposure_px
        struck, track_px = struck + shot.struck, track_px + shot.track_px
    metre = case.optics.mm_per_px * 1e-3
    return bursts / max(exposure_px * metre, 1e-9), bursts, struck / max(track_px * metre, 1e-9)


def hazard(scale: float) -> None:
    """Burst-rate against the true hazard, and at one hazard over density, rate and direction."""
    print("\nburst-rate (1/m; bursts counted)")
    for judge in "rm":
        true = np.array([0.1, 0.3, 0.9, 2.2, 4.0])
        rates, real = [], []
        for h in true:
            count = round((240 if h < 0.5 else 80) * scale)
            rate, bursts, struck = measured_rate(Case(name="", optics=make_optics(), hazard_per_m=h), judge, count, 29)
            rates.append(rate)
            real.append(struck)
            print(f"{judge} hazard {h:4.1f}  rate {rate:.3f}  ({bursts})  went off {struck:.3f}", flush=True)
        slope, slope_real = (
            np.polyfit(np.log(of), np.log(np.maximum(rates, 1e-6)), 1)[0] for of in (true, np.maximum(real, 1e-6))
        )
        print(f"{judge} log-log slope {slope:.3f}, against what went off {slope_real:.3f}", flush=True)
        rows = [
            (f"{sparks:g} sparks/s", Case(name="", optics=make_optics(), sparks_per_s=sparks), round(320_000 / sparks))
            for sparks in (500.0, 1500.0, 4000.0, 7000.0)
        ]
        rows += [
            (name, Case(name="", optics=optics), count)
            for name, optics, count in (
                ("60 fps, 8 ms", make_optics(ms=8.0, fps=60.0), 40),
                ("1000 fps, 0.9 ms", make_optics(ms=0.9, fps=1000.0), 400),
                ("to the left", make_optics(degrees=180.0), 80),
                ("down", make_optics(degrees=90.0), 80),
                ("at 37 degrees", make_optics(degrees=37.0), 80),
            )
        ]
        seen, shares = [], []
        for name, case, count in rows:
            rate, bursts, struck = measured_rate(case, judge, max(8, round(count * scale)), 30)
            seen.append(rate)
            shares.append(rate / struck)
            print(f"{judge} {name:18s} rate {rate:.3f}  ({bursts})  went off {struck:.3f}", flush=True)
        for what, values in (("spread at hazard 0.9", seen), ("as a share of what went off", shares)):
            print(f"{judge} {what}: {min(values):.3f} to {max(values):.3f}, mean {np.mean(values):.3f}", flush=True)


def speed(scale: float) -> None:
    """Processor time a picture, background to figures, against general-purpose tools on the same pictures."""
    print("\nspeed (ms a picture, medians; ratios to threshold + components, line segment detector, Hough lines)")
    for case in [c for c in cases() if c.name not in ("to the left", "gamma", "sharp, noisy", "wide arms, even line")]:
        _speed_row(case.name, case, scale)
    for width, height, mm in ((320, 200, 2.0), (640, 400, 1.0), (1280, 800, 0.5)):
        _speed_row(f"{width}x{height}", Case(name="", optics=make_optics(width=width, height=height, mm=mm)), scale)
    for sparks in (500.0, 2000.0, 8000.0, 20000.0):
        _speed_row(f"{sparks:g} sparks/s", Case(name="", optics=make_optics(), sparks_per_s=sparks), scale)


def _speed_row(name: str, case: Case, scale: float) -> None:
    pictures = [shot.picture for shot in shots(case, "r", 12, 31)]
    sight, meter = Sight(case.optics), BarMeter(FigureSettings(), case.optics)
    lines = cv2.createLineSegmentDetector()
    level = float(np.median(pictures[0])) + 10.0
    times: list[list[float]] = [[], [], [], []]
    streaks = []
    for turn in range(1 + max(1, round(3 * scale))):
        for index, picture in enumerate(pictures):
            marks = [time.process_time()]
            seen = sight.look(picture)
            meter.update(seen, t_s=(turn * len(pictures) + index) / case.optics.fps)
            marks.append(time.process_time())
            lit = cv2.threshold(picture, level, 255, cv2.THRESH_BINARY)[1]
            cv2.connectedComponentsWithStats(lit)
            marks.append(time.process_time())
            lines.detect(picture)
            marks.append(time.process_time())
            cv2.HoughLinesP(lit, 1, math.pi / 180, 20, minLineLength=8, maxLineGap=3)
            marks.append(time.process_time())
            if turn:
                streaks.append(len(seen.streaks))
                for kept, span in zip(times, np.diff(marks), strict=True):
                    kept.append(float(span))
    own, parts, segments, hough = (1e3 * float(np.median(t)) for t in times)
    print(
        f"{name:18s} {np.mean(streaks):5.0f} streaks  own {own:6.2f}  components {parts:5.2f}  "
        f"segments {segments:6.2f}  "
        f"Hough {hough:6.2f}   {own / parts:5.2f} {own / segments:5.2f} {own / hough:5.2f}",
        flush=True,
    )


def main() -> None:
    """Run the parts named, or all."""
    parser = argparse.ArgumentParser(description=__doc__)
    parts = {"accuracy": accuracy, "crossing": crossing, "dark": dark, "hazard": hazard, "speed": speed}
    parser.add_argument("parts", nargs="*", default=[], help="which tables")
    parser.add_argument("--scale", type=float, default=1.0, help="more or fewer pictures than usual")
    args = parser.parse_args()
    cv2.setNumThreads(1)
    print(
        f"{platform.machine()}, {os.cpu_count()} cores, Python {platform.python_version()}, numpy {np.__version__}, "
        f"OpenCV {cv2.__version__}, scipy {scipy.__version__}"
    )
    unknown = [name for name in args.parts if name not in parts]
    if unknown:
        parser.error(f"unknown: {unknown}; there are {list(parts)}")
    for name in args.parts or parts:
        parts[name](args.scale)


if __name__ == "__main__":
    main()
