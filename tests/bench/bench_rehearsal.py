"""What a simulated frame costs: against the camera's pace, and against plain picture operations of the same run.

Run: ``python -m tests.bench.bench_rehearsal``. Processor time of one thread; scenes are interleaved; medians and means
over the frames.
"""

from __future__ import annotations

import platform
import time
from collections.abc import Callable
from dataclasses import replace

import cv2
import numpy as np

from edgewatch.rehearsal.camera import CameraModel
from edgewatch.rehearsal.line import Line
from edgewatch.rehearsal.scene import Scene, Stream
from edgewatch.rehearsal.steel import find_steel
from edgewatch.sight.optics import Optics

OPTICS = Optics(
    width_px=640, height_px=400, mm_per_px=1.0, contact_px=(30.0, 200.0), direction_deg=0.0, exposure_ms=2.5, fps=200.0
)
FRAMES = 240
ROUNDS = 12


def stream(sparks_per_s: float = 4000.0, optics: Optics = OPTICS, steel: str = "C45", **camera: float) -> Stream:
    """A steady stream."""
    return Stream(
        optics,
        find_steel(steel),
        sparks_per_s=sparks_per_s,
        camera=CameraModel(**camera),  # type: ignore[arg-type]
        rng=np.random.default_rng(1),
    )


def line() -> Scene:
    """A whole line: contacts and pauses."""
    plan = Line(bars=12, foreign=2, grade="C45", foreign_grades=("C15", "C80"), rng=np.random.default_rng(1))
    return Scene(OPTICS, plan.conditions(), rng=np.random.default_rng(2))


SCENES: dict[str, Callable[[], Scene]] = {
    "a line of bars with pauses": line,
    "500 sparks/s": lambda: stream(500.0),
    "4000 sparks/s": stream,
    "4000 sparks/s, C80": lambda: stream(steel="C80"),
    "7000 sparks/s": lambda: stream(7000.0),
    "60 frames/s, 8 ms": lambda: stream(optics=replace(OPTICS, fps=60.0, exposure_ms=8.0)),
    "1000 frames/s, 0.9 ms": lambda: stream(optics=replace(OPTICS, fps=1000.0, exposure_ms=0.9)),
    "1280 x 800": lambda: stream(
        optics=replace(OPTICS, width_px=1280, height_px=800, mm_per_px=0.5, contact_px=(60.0, 400.0))
    ),
    "vibration, defocus, JPEG": lambda: stream(vibration_px=1.5, defocus_px=1.0, jpeg_quality=70),
}


def main() -> None:
    """Print the table."""
    cv2.setNumThreads(1)
    print(
        f"{platform.machine()} {platform.system()}, Python {platform.python_version()}, numpy {np.__version__}, "
        f"OpenCV {cv2.__version__}, one thread"
    )
    scenes = {name: make() for name, make in SCENES.items()}
    took: dict[str, list[float]] = {name: [] for name in scenes}
    plain: dict[str, list[float]] = {name: [] for name in scenes}
    for _ in range(ROUNDS):
        for name, scene in scenes.items():
            for _ in range(FRAMES // ROUNDS):
                begin = time.process_time()
                picture, _ = scene.frame()
                took[name].append(time.process_time() - begin)
                begin = time.process_time()
                cv2.connectedComponentsWithStats(cv2.threshold(picture, 40, 255, cv2.THRESH_BINARY)[1])
                plain[name].append(time.process_time() - begin)
    print("scene                        median ms  mean ms  of the frame period  over threshold + components")
    for name, scene in scenes.items():
        mean = float(np.mean(took[name]))
        print(
            f"{name:28s} {1e3 * float(np.median(took[name])):9.2f} {1e3 * mean:8.2f} "
            f"{100.0 * mean * scene.optics.fps:18.0f} % {mean / float(np.mean(plain[name])):24.1f} x"
        )


if __name__ == "__main__":
    main()
