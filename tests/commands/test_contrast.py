"""``edgewatch contrast``: which taught grades can be told apart."""

import json
from pathlib import Path

import numpy as np
import pytest

from edgewatch.commands.cli import main
from edgewatch.record.bandfiles import save_band
from tests.bench.bench_judge import GRADES, taught


@pytest.fixture
def bands(tmp_path: Path) -> Path:
    """Three taught grades, and a twin of the first."""
    rng = np.random.default_rng(1)
    folder = tmp_path / "bands"
    for grade in GRADES[:3]:
        save_band(folder / f"{grade.grade}.toml", taught(grade, 20, rng))
    return folder


def test_table_and_json(bands: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Every ordered pair; the stream's strength is that of the teaching unless given."""
    assert main(["contrast", "--bands", str(bands), "--json"]) == 0
    body = json.loads(capsys.readouterr().out)
    assert body["track_m_s"] == pytest.approx(60.0, rel=0.2)
    assert len(body["pairs"]) == 6
    assert all(pair["told_apart"] and pair["seconds"] > 0.0 for pair in body["pairs"])
    assert main(["contrast", "--bands", str(bands), "--track-m-s", "6", "--json"]) == 0
    weak = json.loads(capsys.readouterr().out)
    assert all(w["seconds"] > 5.0 * p["seconds"] for w, p in zip(weak["pairs"], body["pairs"], strict=True))
    assert main(["contrast", "--bands", str(bands)]) == 0
    assert capsys.readouterr().out.count(" s") >= 6


def test_pairs_that_are_not_told_apart_are_said_plainly(bands: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """A second grade of the same figures."""
    text = (bands / "G45.toml").read_text().replace('"G45"', '"G45b"')
    (bands / "G45b.toml").write_text(text)
    assert main(["contrast", "--bands", str(bands)]) == 0
    said = capsys.readouterr().out
    assert "G45b cannot be told from G45" in said
    assert "never" in said


def test_picture(bands: Path, tmp_path: Path) -> None:
    """Drawn where matplotlib is there."""
    out = tmp_path / "pairs.png"
    assert main(["contrast", "--bands", str(bands), "--picture", str(out)]) == 0
    assert out.read_bytes().startswith(b"\x89PNG")


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (["--bands", "absent"], "holds 0 bands; two are needed"),
        (["--track-m-s", "-4"], "--track-m-s -4: allowed"),
        (["--miss", "0.9"], "--miss 0.9: allowed"),
    ],
)
def test_mistakes_are_one_line(
    words: list[str], said: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    """Exit status 2, one line."""
    monkeypatch.chdir(tmp_path)
    assert main(["contrast", *words]) == 2
    error = capsys.readouterr().err
    assert said in error and error.count("\n") == 1


def test_bands_without_bars_need_the_streams_strength(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Bands written by hand say nothing of the stream."""
    for grade, low in (("a", 0.1), ("b", 1.0)):
        (tmp_path / f"{grade}.toml").write_text(
            f'grade = "{grade}"\n[burst_rate]\nlow_per_m = {low}\nhigh_per_m = {2 * low}\n'
        )
    assert main(["contrast", "--bands", str(tmp_path)]) == 2
    assert "--track-m-s: needed" in capsys.readouterr().err
    assert main(["contrast", "--bands", str(tmp_path), "--track-m-s", "100"]) == 0
