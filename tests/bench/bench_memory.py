"""Peak memory of ``edgewatch watch`` on a 640 x 400 recording, in a process of its own.

    .venv/bin/python -m tests.bench.bench_memory [--bars 6]

A simulated line is recorded with a lossless codec (ffmpeg), then watched by the installed command, with bands, journal
and evidence. The peak of the resident memory is what the kernel has counted for that process. Exit status 1 above the
limit of 200 MB.
"""

from __future__ import annotations

import argparse
import os
import platform
import subprocess
import sys
import tempfile
from collections.abc import Iterator
from pathlib import Path

import cv2
import numpy as np
from numpy.typing import NDArray

from edgewatch.frames.registry import open_source
from edgewatch.record.tomlfile import read_toml
from edgewatch.settings import Settings, read_settings
from tests.clips import write_clip

TOP = Path(__file__).parents[2]
LIMIT_MB = 200.0


def make_settings(bars: int) -> Settings:
    """A line before the example camera, with one foreign bar in six."""
    data = read_toml(TOP / "calib" / "optics.toml")
    return read_settings({**data, "rehearsal": {"bars": bars, "foreign": bars // 6, "seed": 11}}, file="bench")


def record(settings: Settings, clip: Path) -> int:
    """Write the whole line as a lossless clip; returns the number of frames."""
    source = open_source("rehearsal:", settings, live=False)
    frames = 0

    def pictures() -> Iterator[NDArray[np.uint8]]:
        nonlocal frames
        while (frame := source.read(1.0)) is not None:
            frames += 1
            yield frame.picture

    write_clip(clip, pictures(), fps=settings.optics.fps)
    return frames


def watch(clip: Path, folder: Path) -> int:
    """Run ``edgewatch watch`` on the clip and return its peak resident memory (bytes)."""
    station = folder / "station.toml"
    bands = str(TOP / "calib" / "bands")
    station.write_text((TOP / "calib" / "optics.toml").read_text(encoding="utf-8"), encoding="utf-8")
    words = ["watch", "--station", str(station), "--bands", bands, "--expect", "C45", "--source", f"clip:{clip}"]
    command = [sys.executable, "-m", "edgewatch", *words, "--journal", str(folder / "journal.sqlite")]
    process = subprocess.Popen(command)
    _, status, usage = os.wait4(process.pid, 0)
    process.returncode = os.waitstatus_to_exitcode(status)
    if process.returncode:
        raise SystemExit(f"edgewatch watch ended with {process.returncode}")
    return usage.ru_maxrss * 1024  # Linux counts in kibibytes: getrusage(2)


def main() -> int:
    """Measure once and print one line."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--bars", type=int, default=6, help="bars in the recording")
    bars = parser.parse_args().bars
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        frames = record(make_settings(bars), folder / "line.mkv")
        peak_mb = watch(folder / "line.mkv", folder) / 1e6
    versions = f"Python {platform.python_version()}, numpy {np.__version__}, OpenCV {cv2.__version__}"
    print(f"{platform.machine()}, {os.cpu_count()} cores, {versions}")
    print(f"edgewatch watch, 640 x 400, {frames} frames, {bars} bars: peak resident memory {peak_mb:.0f} MB")
    return 0 if peak_mb < LIMIT_MB else 1


if __name__ == "__main__":
    sys.exit(main())
