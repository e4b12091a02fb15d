"""``edgewatch teach``: clips of reference bars -> a band file."""

import json
from pathlib import Path

import pytest

from edgewatch.commands.cli import main
from edgewatch.record.bandfiles import load_band
from tests.commands.linear import OPTIONS, make_clip


@pytest.fixture(scope="module")
def clip(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Six bars of one grade."""
    path = tmp_path_factory.mktemp("clips") / "six.mkv"
    make_clip(path, bars=6, contact_s=0.22, pause_s=0.35)
    return path


@pytest.fixture(scope="module")
def taught(clip: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The band file taught from it."""
    out = tmp_path_factory.mktemp("bands") / "C45.toml"
    assert main(["teach", "C45", str(clip), *OPTIONS, "--out", str(out)]) == 0
    return out


@pytest.mark.slow
def test_every_contact_is_a_reference_bar(taught: Path) -> None:
    """Six bars, with the conditions they were taught under."""
    band = load_band(taught)
    assert (band.grade, band.bars_used, len(band.bars)) == ("C45", 6, 6)
    assert band.burst_rate_low_per_m < band.rate_center_per_m < band.burst_rate_high_per_m
    assert (band.mm_per_px, band.exposure_ms, band.fps) == (2.0, 2.5, 200.0)
    assert (band.content, band.confidence) == (0.99, 0.95)
    assert band.taught.endswith("Z")
    assert [bar.clip for bar in band.bars] == ["six.mkv"] * 6
    assert band.bursts == sum(bar.bursts for bar in band.bars) > 0


@pytest.mark.slow
def test_bars_are_added_and_left_out(taught: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Without a clip: the bars of a band taught before, one left out by number; JSON says so; a report is written."""
    out, report = tmp_path / "again" / "C45.toml", tmp_path / "report.html"
    words = ["teach", "C45", "--add", str(taught), "--leave-out", "2", "--out", str(out), "--content", "0.95", "--json"]
    assert main([*words, "--report", str(report)]) == 0
    body = json.loads(capsys.readouterr().out)
    assert (body["bars"], body["left_out"], body["content"]) == (5, [2], 0.95)
    assert any("5 reference bars" in said for said in body["remarks"])
    assert load_band(out).bars[1].left_out
    page = report.read_text(encoding="utf-8")
    assert "left out" in page and "data:image/png;base64," in page


@pytest.mark.slow
def test_verify_with_master_bars(clip: Path, taught: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """The same bars agree; under another exposure the band is refused; the band file is not touched."""
    before = taught.read_bytes()
    assert main(["teach", "C45", str(clip), *OPTIONS, "--out", str(taught), "--verify", "--json"]) == 0
    body = json.loads(capsys.readouterr().out)
    assert body["holds"] and body["bars"] == 6
    assert body["ratio_low"] < 1.0 < body["ratio_high"]
    other = [*OPTIONS[:-3], "2.0", *OPTIONS[-2:]]
    assert main(["teach", "C45", str(clip), *other, "--out", str(taught), "--verify"]) == 2
    assert "band_misfit_exposure" in capsys.readouterr().err
    assert taught.read_bytes() == before


@pytest.mark.slow
def test_clips_of_other_conditions_are_not_added(clip: Path, taught: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Adding bars seen at another scale is refused."""
    other = ["--mm-per-px", "1", *OPTIONS[2:]]
    assert main(["teach", "C45", str(clip), *other, "--add", str(taught), "--out", str(taught)]) == 2
    assert "band_misfit_scale" in capsys.readouterr().err


@pytest.mark.parametrize(
    ("words", "status", "said"),
    [
        (["C45"], 2, "CLIP: at least one clip"),
        (["C 45/..", "x.mkv"], 2, "GRADE 'C 45/..'"),
        (["C45", "absent.mkv"], 3, "no such file"),
        (["C45", "absent.mkv", "--content", "2"], 2, "--content 2: allowed"),
        (["C45", "--add", "absent.toml"], 2, "absent.toml: cannot be read"),
        (["C45", "absent.mkv", "--verify"], 2, "cannot be read"),
        (["C45", "--verify", "--add", "absent.toml"], 2, "--verify needs a clip"),
    ],
)
def test_mistakes_are_one_line(
    words: list[str],
    status: int,
    said: str,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
) -> None:
    """Exit status 2 or 3, one line on stderr, nothing written."""
    monkeypatch.chdir(tmp_path)
    assert main(["teach", *words]) == status
    error = capsys.readouterr().err
    assert said in error
    assert error.count("\n") == 1
    assert list(tmp_path.iterdir()) == []


def test_leave_out_needs_numbers(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Words are refused before the teaching; so is a band without reference bars."""
    band = tmp_path / "C45.toml"
    band.write_text('grade = "C45"\n[burst_rate]\nlow_per_m = 0.1\nhigh_per_m = 0.2\n')
    assert main(["teach", "C45", "--add", str(band), "--leave-out", "two"]) == 2
    assert "holds no reference bars" in capsys.readouterr().err
