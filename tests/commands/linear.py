"""Clips of a simulated line for the commands that read clips: made once a test module, with the truth beside them."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

import numpy as np

from edgewatch.rehearsal.line import Bar, Line
from edgewatch.rehearsal.scene import Scene
from edgewatch.sight.optics import Optics
from tests.clips import write_clip

OPTICS = Optics(
    width_px=400, height_px=160, mm_per_px=2.0, contact_px=(10.0, 80.0), direction_deg=0.0, exposure_ms=2.5, fps=200.0
)
OPTIONS = ["--mm-per-px", "2", "--contact", "10,80", "--direction", "0", "--exposure-ms", "2.5", "--fps", "200"]


def make_clip(
    path: Path, *, grade: str = "C45", bars: int = 6, contact_s: float = 0.35, pause_s: float = 0.45, seed: int = 1
) -> Sequence[Bar]:
    """Write a lossless clip of ``bars`` bars and return them as they really are."""
    line = Line(
        bars=bars,
        foreign=0,
        grade=grade,
        foreign_grades=(),
        contact_s=contact_s,
        pause_s=pause_s,
        rng=np.random.default_rng(seed),
    )
    scene = Scene(OPTICS, line.conditions(), rng=np.random.default_rng(seed + 1))
    write_clip(path, (scene.frame()[0] for _ in range(int(line.end_s * OPTICS.fps))))
    return [line[number] for number in range(bars)]
