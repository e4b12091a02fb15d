"""A small mill for the tests: simulated bars in lossless clips, and a station that watches them."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from edgewatch.frames.rehearsal import RehearsalSource
from edgewatch.rehearsal.line import Bar
from edgewatch.settings import read_settings
from tests.clips import write_clip

OPTICS: dict[str, Any] = {
    "mm_per_px": 2.0,
    "contact_px": [12, 100],
    "direction_deg": 0,
    "exposure_ms": 3.0,
    "fps": 100,
}
"""A quarter of the pixels of a usual picture and half of its rate, so that the tests stay quick."""
OPTIONS = ("--mm-per-px", "2", "--contact", "12,100", "--direction", "0", "--exposure-ms", "3", "--fps", "100")
"""The same as options."""
SIZE = {"width_px": 320, "height_px": 200}


def line_clip(
    path: Path, *, grade: str, bars: int, foreign: int = 0, foreign_grade: str = "C80", seed: int = 1
) -> list[Bar]:
    """Write a clip of a simulated line; return what is true of its bars."""
    source = RehearsalSource(
        read_settings(
            {
                "source": SIZE,
                "optics": OPTICS,
                "rehearsal": {
                    "grade": grade,
                    "bars": bars,
                    "foreign": foreign,
                    "foreign_grades": [foreign_grade],
                    "contact_s": 1.0,
                    "pause_s": 0.6,
                    "seed": seed,
                },
            },
            file="test",
        )
    )

    def pictures() -> Iterator[NDArray[np.uint8]]:
        while (frame := source.read(1.0)) is not None:
            yield frame.picture

    write_clip(path, pictures(), fps=100)
    return source.bars


def edgewatch(*words: str | Path, folder: Path, stdin: Any = subprocess.DEVNULL) -> subprocess.CompletedProcess[str]:
    """Run the command as a user does, in ``folder``."""
    return subprocess.run(
        [sys.executable, "-m", "edgewatch", *(str(word) for word in words)],
        cwd=folder,
        stdin=stdin,
        capture_output=True,
        text=True,
        timeout=300,
        env={**os.environ, "PYTHONPATH": str(Path(__file__).parents[2])},
        check=False,
    )


def lines(result: subprocess.CompletedProcess[str]) -> list[dict[str, Any]]:
    """JSON lines of a run that must have gone well."""
    assert result.returncode == 0, result.stderr
    return [json.loads(line) for line in result.stdout.splitlines()]


def toml(sections: dict[str, dict[str, Any]]) -> str:
    """A station file; JSON's values are TOML's too."""
    return "\n".join(
        f"[{name}]\n" + "".join(f"{key} = {json.dumps(value)}\n" for key, value in keys.items())
        for name, keys in sections.items()
    )
