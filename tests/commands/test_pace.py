"""``edgewatch pace``: measured on this machine, so tests look at structure and advice, never at a speed."""

from __future__ import annotations

import json

import pytest

from edgewatch.commands.cli import main
from edgewatch.commands.pace import Cell, advise
from edgewatch.sight.optics import Optics

OPTICS = ["--mm-per-px", "2", "--contact", "8,60", "--direction", "0", "--exposure-ms", "2.5", "--fps", "0.5"]


def _optics(fps: float) -> Optics:
    return Optics(
        width_px=640,
        height_px=400,
        mm_per_px=0.5,
        contact_px=(0.0, 200.0),
        direction_deg=0.0,
        exposure_ms=2.0,
        fps=fps,
    )


def _cell(sustained_fps: float, fps: float) -> Cell:
    return Cell(
        width_px=640,
        height_px=400,
        sparks_per_s=4000.0,
        streaks=80.0,
        median_ms=1.0,
        slow_ms=1.0,
        sustained_fps=sustained_fps,
        enough=sustained_fps >= fps,
    )


@pytest.mark.slow
def test_json_lists_every_size_and_density(
    capsys: pytest.CaptureFixture[str], tmp_path: object, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Each size comes with each density; a rate of one frame in two seconds is sustained anywhere."""
    monkeypatch.chdir(str(tmp_path))
    assert main(["pace", *OPTICS, "--sparks", "200,900", "--seconds", "0.01", "--json"]) == 0
    body = json.loads(capsys.readouterr().out)
    assert body["fps"] == 0.5
    sizes = {(cell["width_px"], cell["height_px"]) for cell in body["cells"]}
    assert sizes == {(640, 400), (320, 200), (1280, 800)}
    assert len(body["cells"]) == 6
    for cell in body["cells"]:
        assert 0.0 < cell["median_ms"] <= cell["slow_ms"]
        assert cell["sustained_fps"] == pytest.approx(0.7e3 / cell["slow_ms"])
        assert cell["enough"]
    assert body["advice"] == ["0.5 frames/s are sustained at 640 x 400"]


@pytest.mark.slow
def test_a_rate_nobody_sustains_gives_status_one(
    capsys: pytest.CaptureFixture[str], tmp_path: object, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A hundred thousand frames a second cannot be judged, and the command says what to do."""
    monkeypatch.chdir(str(tmp_path))
    options = ["--exposure-ms", "0.01", "--fps", "100000", "--contact", "8,60"]
    assert main(["pace", *options, "--sparks", "100", "--seconds", "0.01"]) == 1
    out = capsys.readouterr().out
    assert "are not sustained at 640 x 400" in out
    assert "rate: set optics.fps" in out


def test_advice_follows_the_number_of_pixels() -> None:
    """At half the rate asked for: half the rows, or two by two pixels in one with twice the millimetres."""
    advice = advise(_cell(100.0, 200.0), _optics(200.0))
    assert advice == (
        "200 frames/s are not sustained at 640 x 400: 100 are",
        "rate: set optics.fps (and the camera) to 100 or less",
        "region: set source.region_px to 640 x 200 px about the stream, or less",
        "binning: set source.binning to 2; pixels then are 1 mm",
    )


def test_no_region_is_advised_that_would_hold_nothing() -> None:
    """Far too slow a board gets no advice that leads to a picture of a few rows."""
    advice = advise(_cell(1.0, 200.0), _optics(200.0))
    assert not any(line.startswith(("region", "binning")) for line in advice)


@pytest.mark.parametrize(
    ("options", "named"),
    [
        (["--sparks", "many"], "--sparks many"),
        (["--sparks", "-1"], "--sparks -1"),
        (["--headroom", "1.5"], "--headroom 1.5"),
        (["--seconds", "nan"], "--seconds nan"),
    ],
)
def test_bad_options_are_one_line(
    options: list[str],
    named: str,
    capsys: pytest.CaptureFixture[str],
    tmp_path: object,
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    """Bad usage is status 2 and names option and value."""
    monkeypatch.chdir(str(tmp_path))
    assert main(["pace", *options]) == 2
    error = capsys.readouterr().err
    assert named in error
    assert error.count("\n") == 1


def test_what_a_board_without_compiled_steps_is_told(monkeypatch: pytest.MonkeyPatch) -> None:
    """Compiling them is the first thing to change, and no station that keeps up hears of it."""
    monkeypatch.setattr("edgewatch.sight.native.LIBRARY", None)
    assert "compiler: " in advise(_cell(100.0, 200.0), _optics(200.0))[-1]
    assert len(advise(_cell(400.0, 200.0), _optics(200.0))) == 1
