"""The ``scale`` command."""

from __future__ import annotations

import json
import sys
from pathlib import Path

import cv2
import numpy as np
import pytest

from edgewatch.commands.cli import main
from edgewatch.settings import read_settings
from tests.clips import write_clip
from tests.sight.test_scale import board_picture

if sys.version_info >= (3, 11):
    import tomllib
else:
    import tomli as tomllib


def _run(capsys: pytest.CaptureFixture[str], *words: str) -> tuple[int, str, str]:
    status = main(["scale", *words])
    out, err = capsys.readouterr()
    return status, out, err


def test_board_gives_lines_for_the_station_file(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """What is printed is TOML that the settings take, with the true scale in it and the axis as marked."""
    cv2.imwrite(str(tmp_path / "board.png"), board_picture(2.5, turn_deg=5.0))
    status, out, err = _run(
        capsys,
        *(str(tmp_path / "board.png"), "--board", "9x6", "--square-mm", "10"),
        *("--contact", "40,200", "--towards", "340,500"),
    )
    assert (status, err) == (0, "")
    optics = read_settings(tomllib.loads(out), file="printed").optics
    assert optics.mm_per_px == pytest.approx(0.4, rel=0.004)
    assert (optics.contact_px, optics.direction_deg) == ((40.0, 200.0), 45.0)


def test_clip_of_a_board_is_averaged(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """A clip serves as a picture; noise that hides the corners in one picture averages out."""
    noisy = [board_picture(2.5, noise_dn=60.0, seed=seed) for seed in range(16)]
    clip = write_clip(tmp_path / "board.mkv", noisy)
    status, out, _ = _run(capsys, str(clip), "--board", "9x6", "--square-mm", "10", "--json")
    found = json.loads(out)
    assert status == 0
    assert abs(found["mm_per_px"] - 0.4) <= found["plus_minus_mm_per_px"]
    assert found["corners"] == 54


def test_tilted_board_is_remarked(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """The remark goes to stderr, and into JSON."""
    cv2.imwrite(str(tmp_path / "board.png"), board_picture(tilt_deg=12.0))
    words = (str(tmp_path / "board.png"), "--board", "9x6", "--square-mm", "10")
    assert "hold it square" in _run(capsys, *words)[2]
    assert "hold it square" in json.loads(_run(capsys, *words, "--json")[1])["remarks"][0]


def test_two_points(capsys: pytest.CaptureFixture[str]) -> None:
    """Points need no picture; numbers that are not known in JSON are null."""
    status, out, _ = _run(capsys, "--points", "100,50", "500,50", "--distance-mm", "200", "--json")
    found = json.loads(out)
    assert status == 0
    assert found["mm_per_px"] == 0.5 and found["rms_px"] is None
    assert found["plus_minus_mm_per_px"] == pytest.approx(0.5 * 2 * 2**0.5 * 0.5 / 400)


def test_no_board_in_the_picture(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Exit status 1 and a line that says what helps."""
    cv2.imwrite(str(tmp_path / "dark.png"), np.zeros((100, 100), np.uint8))
    status, out, err = _run(capsys, str(tmp_path / "dark.png"), "--board", "9x6", "--square-mm", "10")
    assert (status, out) == (1, "")
    assert "no board of 9x6 inner corners is found" in err


@pytest.mark.parametrize(
    ("words", "status", "says"),
    [
        ((), 2, "give either --board"),
        (("a.png", "--board", "9x6", "--points", "1,1", "2,2"), 2, "give either --board"),
        (("a.png", "--board", "9by6", "--square-mm", "10"), 2, "such as 9x6"),
        (("a.png", "--board", "9x6"), 2, "--square-mm: needed"),
        (("--board", "9x6", "--square-mm", "10"), 2, "a picture of the board is needed"),
        (("--points", "1,1", "2,2"), 2, "--distance-mm: needed"),
        (("--points", "1;1", "2,2", "--distance-mm", "5"), 2, "two numbers X,Y"),
        (("--points", "nan,1", "2,2", "--distance-mm", "5"), 2, "two numbers X,Y"),
        (("--points", "1,1", "1,1", "--distance-mm", "5"), 2, "two different points"),
        (("--points", "1,1", "2,1", "--distance-mm", "-5"), 2, "distance_mm"),
        (("--points", "1,1", "2,1", "--distance-mm", "5", "--towards", "3,3"), 2, "--contact: needed"),
        (("--points", "1,1", "2,1", "--distance-mm", "5", "--contact", "3,3", "--towards", "3,3"), 2, "another point"),
        (("nowhere.png", "--board", "9x6", "--square-mm", "10"), 3, "nowhere.png"),
        (("camera:/dev/nowhere", "--board", "9x6", "--square-mm", "10"), 3, "no such device"),
    ],
)
def test_mistakes_are_one_line(
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
    words: tuple[str, ...],
    status: int,
    says: str,
) -> None:
    """Usage is exit status 2, what is not there 3; one line each."""
    monkeypatch.chdir(tmp_path)
    cv2.imwrite("a.png", board_picture())
    found, out, err = _run(capsys, *words)
    assert (found, out) == (status, "")
    assert says in err and err.count("\n") == 1
