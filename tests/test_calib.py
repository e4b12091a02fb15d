"""The example optics and bands that ship: valid, of one camera, and what the simulated grades are."""

from __future__ import annotations

from pathlib import Path

import pytest

from edgewatch.judge.bands import Band, read_band
from edgewatch.record.tomlfile import read_toml
from edgewatch.rehearsal.steel import find_steel
from edgewatch.settings import Settings, read_settings

CALIB = Path(__file__).parents[1] / "calib"
GRADES = ("C15", "C45", "C80", "42CrMo4")
LEAST_BARS = 20
"""Reference bars from which a band is not wider than it need be."""


def settings(name: str) -> Settings:
    """A shipped station file."""
    return read_settings(read_toml(CALIB / name), file=name)


def band(grade: str) -> Band:
    """A shipped band."""
    path = CALIB / "bands" / f"{grade}.toml"
    return read_band(read_toml(path), file=path.name)


def test_the_example_optics_are_those_of_the_rehearsal() -> None:
    """One camera: bands taught with the one file fit the others, the commented sample among them."""
    optics = settings("optics.toml").sight_optics()
    assert optics == settings("rehearsal.toml").sight_optics()
    assert optics == settings("../deploy/station.toml").sight_optics()


def test_each_grade_of_the_example_has_its_band() -> None:
    """As many as the README says, and no stray file."""
    assert {path.stem for path in (CALIB / "bands").iterdir()} == set(GRADES)


@pytest.mark.parametrize("grade", GRADES)
def test_the_band_fits_its_camera_and_its_steel(grade: str) -> None:
    """It was taught with the example optics from enough bars, and holds the burst hazard that was simulated."""
    taught = band(grade)
    assert taught.grade == grade
    assert taught.bars_used >= LEAST_BARS
    assert taught.misfit(settings("optics.toml").sight_optics()) == ()
    hazard_per_m = find_steel(grade).hazard_per_m
    assert taught.burst_rate_low_per_m < hazard_per_m < taught.burst_rate_high_per_m


def test_low_medium_and_high_carbon_are_told_apart_by_their_bands() -> None:
    """Their intervals of burst-rate do not touch, so that a rehearsal has something to find."""
    low, medium, high = (band(grade) for grade in ("C15", "C45", "C80"))
    assert low.burst_rate_high_per_m < medium.burst_rate_low_per_m
    assert medium.burst_rate_high_per_m < high.burst_rate_low_per_m
