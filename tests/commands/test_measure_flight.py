"""``measure --flight``: particle radius and launch speed from a high-speed recording."""

from __future__ import annotations

import json
from pathlib import Path

import cv2
import numpy as np
import pytest

from edgewatch.commands.cli import main
from edgewatch.rehearsal.scene import Stream
from edgewatch.rehearsal.steel import find_steel
from edgewatch.sight.optics import Optics

OPTICS = Optics(
    width_px=640, height_px=240, mm_per_px=1.0, contact_px=(30.0, 120.0), direction_deg=0.0, exposure_ms=0.9, fps=1000.0
)
OPTIONS = ["--mm-per-px", "1", "--contact", "30,120", "--direction", "0"]


@pytest.fixture(scope="module")
def clip(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A tenth of a second at 1000 frames a second, launched at 0.94 of 28 m/s, as a folder of pictures."""
    folder = tmp_path_factory.mktemp("flight")
    source = Stream(OPTICS, find_steel("C45"), sparks_per_s=1500.0, wheel_speed_m_s=28.0, rng=np.random.default_rng(5))
    for index in range(100):
        picture, _ = source.frame()
        cv2.imwrite(str(folder / f"{index:04d}.pgm"), picture)
    return folder


def test_radius_and_launch_speed_are_printed(clip: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """As JSON: launch speed within four percent, radius within a quarter of what was simulated (median 45)."""
    assert main(["measure", str(clip), *OPTIONS, "--exposure-ms", "0.9", "--fps", "1000", "--flight", "--json"]) == 0
    flight = json.loads(capsys.readouterr().out)["flight"]
    assert flight["usable"]
    assert flight["particles"] > 40
    assert flight["launch_speed_m_s"] == pytest.approx(0.94 * 28.0, rel=0.04)
    assert flight["radius_um"] == pytest.approx(45.0, rel=0.25)


def test_a_slow_recording_says_so(clip: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """In words, with what to do; without the option nothing is said of flight."""
    assert main(["measure", str(clip), *OPTIONS, "--exposure-ms", "0.9", "--fps", "100", "--flight"]) == 0
    assert "400 frames/s" in capsys.readouterr().out
    assert main(["measure", str(clip), *OPTIONS, "--exposure-ms", "0.9", "--fps", "1000", "--json"]) == 0
    assert "flight" not in json.loads(capsys.readouterr().out)
