"""Band files: read, written, refused."""

import dataclasses
import math
import sys

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from edgewatch.errors import SettingsError
from edgewatch.judge.bands import SCHEMA, Band, ReferenceBar, band_toml, read_band
from edgewatch.sight.optics import Optics

if sys.version_info >= (3, 11):
    import tomllib
else:
    import tomli as tomllib

OPTICS = Optics(
    width_px=640, height_px=400, mm_per_px=0.8, contact_px=(20.0, 200.0), direction_deg=5.0, exposure_ms=2.5, fps=200.0
)
BAR = ReferenceBar(
    number=1,
    clip='bars "one".mkv',
    begin_s=0.25,
    end_s=1.5,
    frames=250,
    streaks=5000,
    bursts=120,
    track_m=250.0,
    exposure_m=260.0,
    reach_mm=310.0,
    reach_track_m=150.0,
    cut_share=0.001,
    spark_speed_m_s=24.0,
    streak_peak_dn=75.5,
)
BAND = Band(
    grade="C45",
    burst_rate_low_per_m=0.3,
    burst_rate_high_per_m=0.65,
    reach_low_mm=250.0,
    reach_high_mm=380.0,
    reach_noise_mm2_m=4000.0,
    streak_peak_dn=75.5,
    streak_peak_scatter=0.05,
    streak_width_px=2.25,
    bars_used=1,
    bursts=120,
    track_m=250.0,
    mm_per_px=0.8,
    exposure_ms=2.5,
    fps=200.0,
    taught="2026-11-02T10:00:00Z",
    bars=(BAR,),
)
RATES = st.floats(1e-4, 400.0)


def written(**changes: object) -> dict:
    """A good file, parsed, with sections' keys changed: ``section__key=value``."""
    data = tomllib.loads(band_toml(BAND))
    for name, value in changes.items():
        section, _, key = name.partition("__")
        if key:
            data[section][key] = value
        else:
            data[section] = value
    return data


def test_what_is_written_is_read_back() -> None:
    """The whole band with its reference bars, quotes in names and NaN included."""
    again = read_band(tomllib.loads(band_toml(BAND)), file="C45.toml")
    for field in dataclasses.fields(Band):
        one, other = getattr(BAND, field.name), getattr(again, field.name)
        if isinstance(one, float):
            assert other == pytest.approx(one, rel=1e-8, nan_ok=True), field.name
        elif field.name == "contact_px":
            assert all(math.isnan(part) for part in other)
        else:
            assert other == one, field.name


@given(RATES, RATES, st.booleans(), st.text(max_size=30))
@settings(max_examples=60)
def test_any_band_survives_the_file(one: float, other: float, reach: bool, clip: str) -> None:
    """Limits to nine digits, whatever a clip is called."""
    low, high = sorted((one, other))
    if not low < high * (1.0 - 1e-6):
        high = low * 2.0
    bar = dataclasses.replace(BAR, clip=clip)
    limits = {"reach_low_mm": low, "reach_high_mm": high} if reach else {}
    band = Band(grade="g", burst_rate_low_per_m=low, burst_rate_high_per_m=high, bars=(bar,), **limits)
    again = read_band(tomllib.loads(band_toml(band)), file="g.toml")
    assert again.burst_rate_high_per_m == pytest.approx(high, rel=1e-8)
    assert again.has_reach is reach
    assert again.bars[0].clip == clip


def test_a_band_written_by_hand_needs_only_its_limits() -> None:
    """Grade and two limits are enough; what is left out follows from them."""
    band = read_band({"grade": "g", "burst_rate": {"low_per_m": 0.2, "high_per_m": 0.8}}, file="g.toml")
    assert band.rate_center_per_m == pytest.approx(0.4)
    assert 0.1 < band.rate_scatter < 0.3
    assert not band.has_reach
    assert band.streak_peak_dn is None


@pytest.mark.parametrize(
    ("changes", "said"),
    [
        ({"burst_rate__low_per_m": 0.9}, "burst_rate.high_per_m = 0.65: allowed is a number above"),
        ({"burst_rate__low_per_m": 0.65}, "burst_rate.high_per_m = 0.65: allowed is a number above"),
        ({"burst_rate__low_per_m": -0.1}, "burst_rate.low_per_m = -0.1: allowed is a number from 0"),
        ({"burst_rate__high_per_m": math.nan}, "burst_rate.high_per_m = nan: allowed is a number from 0"),
        ({"burst_rate__high_per_m": math.inf}, "burst_rate.high_per_m = inf"),
        ({"burst_rate__high_per_m": "a lot"}, "burst_rate.high_per_m = 'a lot': allowed is a number"),
        ({"burst_rate__dispersion": 0.2}, "burst_rate.dispersion = 0.2: allowed is a number from 1"),
        ({"reach__low_mm": 400.0}, "reach.high_mm = 380.0: allowed is a number above"),
        ({"teaching__content": 1.5}, "teaching.content = 1.5: allowed is a number between 0 and 1"),
        ({"optics__fps": -3.0}, "optics.fps = -3.0: allowed is a number above 0"),
        ({"optics__contact_px": [1.0]}, "optics.contact_px = [1.0]: allowed is a list of two numbers"),
        ({"burst_rate__median": 0.4}, "burst_rate.median = 0.4: no such key; known are low_per_m"),
        ({"streaks__peak_dn": -3.0}, "streaks.peak_dn = -3.0: allowed is a number above 0"),
        ({"streaks__width_scatter": "wide"}, "streaks.width_scatter = 'wide': allowed is a number"),
        ({"spectrum": {}}, "spectrum: no such section"),
        ({"reach": 7}, "reach = 7: allowed is a section"),
        ({"grade": "C 45/.."}, "grade = 'C 45/..': allowed are letters"),
        ({"grade": 45}, "grade = 45: allowed are letters"),
        ({"schema": "something/9"}, f"schema = 'something/9': allowed is '{SCHEMA}'"),
        ({"bars": 3}, "bars: allowed is a list"),
        ({"bars": [{"number": 1}]}, "bars[1].bursts is missing"),
        ({"bars": [{"number": -1}]}, "bars[1].number = -1: allowed is a whole number"),
        ({"teaching__bars_used": True}, "teaching.bars_used = True: allowed is a whole number"),
    ],
)
def test_bad_bands_are_refused(changes: dict, said: str) -> None:
    """Empty, upside down, out of range, misspelt: the file, the key, the value and what is allowed."""
    with pytest.raises(SettingsError) as caught:
        read_band(written(**changes), file="C45.toml")
    assert said in str(caught.value)
    assert all(problem.startswith("C45.toml: ") for problem in caught.value.problems)


def test_all_problems_at_once() -> None:
    """Three mistakes, three problems."""
    with pytest.raises(SettingsError) as caught:
        read_band(written(burst_rate__median=1, reach__low_mm="x", teaching__taught=3), file="f")
    assert len(caught.value.problems) == 3


def test_missing_limits_are_named() -> None:
    """A band without limits is none."""
    with pytest.raises(SettingsError, match=r"burst_rate\.low_per_m is missing"):
        read_band({"grade": "g"}, file="f")
    with pytest.raises(SettingsError, match="grade is missing"):
        read_band({"burst_rate": {"low_per_m": 0.1, "high_per_m": 0.2}}, file="f")


def test_bad_arguments() -> None:
    """Built in code, a bad band is a ValueError."""
    with pytest.raises(ValueError, match="burst_rate_high_per_m"):
        Band(grade="g", burst_rate_low_per_m=1.0, burst_rate_high_per_m=0.5)
    with pytest.raises(ValueError, match="reach_high_mm"):
        Band(grade="g", burst_rate_low_per_m=0.1, burst_rate_high_per_m=0.5, reach_low_mm=5.0)


@pytest.mark.parametrize(
    ("change", "causes"),
    [
        ({}, ()),
        ({"mm_per_px": 0.82}, ()),
        ({"mm_per_px": 0.9}, ("band_misfit_scale",)),
        ({"exposure_ms": 2.0}, ("band_misfit_exposure",)),
        ({"fps": 150.0}, ("band_misfit_rate",)),
        ({"fps": 100.0, "exposure_ms": 5.0}, ("band_misfit_exposure", "band_misfit_rate")),
        ({"contact_px": (25.0, 190.0)}, ()),
    ],
)
def test_other_conditions_are_told(change: dict, causes: tuple) -> None:
    """Scale, exposure and frame rate must be those of the teaching; the contact point may move."""
    assert BAND.misfit(dataclasses.replace(OPTICS, **change)) == causes


def test_a_band_that_does_not_know_its_optics_fits() -> None:
    """Nothing is said of what is not known."""
    assert Band(grade="g", burst_rate_low_per_m=0.1, burst_rate_high_per_m=0.5).misfit(OPTICS) == ()
