"""``edgewatch measure``: the contract of clip measurements."""

import json
import math
from pathlib import Path

import cv2
import numpy as np
import pytest

from edgewatch.commands.cli import main
from tests.clips import write_pictures
from tests.commands.linear import OPTIONS, make_clip

FIGURES = {
    "streaks",
    "bursts",
    "track_m",
    "burst_rate_per_m",
    "burst_rate_low_per_m",
    "burst_rate_high_per_m",
    "reach_mm",
    "reach_truncated",
    "streaks_per_frame",
    "spark_speed_m_s",
}
"""What the contract asks for of a clip and of each contact."""


@pytest.fixture(scope="module")
def line(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, list]:
    """Two bars and the truth about them."""
    clip = tmp_path_factory.mktemp("clips") / "bars.mkv"
    return clip, list(make_clip(clip, bars=2, contact_s=0.25, pause_s=0.4))


def measured(capsys: pytest.CaptureFixture[str], *words: str) -> dict:
    """The JSON of a run that must do."""
    assert main(["measure", *words, "--json"]) == 0
    return json.loads(capsys.readouterr().out)


@pytest.mark.slow
def test_the_contract(line: tuple[Path, list], tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """One object with everything asked for; contacts where the bars were; one line of detections a frame."""
    clip, bars = line
    out = tmp_path / "seen.jsonl"
    body = measured(capsys, str(clip), *OPTIONS, "--detections", str(out))
    assert body.keys() >= FIGURES | {"frames", "seconds", "contacts", "processing_ms"}
    assert body["seconds"] == pytest.approx(body["frames"] / 200.0)
    assert 0.0 < body["processing_ms"]["median"] <= body["processing_ms"]["p95"]
    assert len(body["contacts"]) == 2
    for contact, bar in zip(body["contacts"], bars, strict=True):
        assert contact.keys() >= FIGURES | {"begin_s", "end_s"}
        assert contact["begin_s"] == pytest.approx(bar.begin_s, abs=0.03)
        assert contact["end_s"] == pytest.approx(bar.end_s, abs=0.12)  # sparks fly on for a tenth of a second
        assert contact["burst_rate_low_per_m"] < contact["burst_rate_per_m"] < contact["burst_rate_high_per_m"]
        assert contact["bursts"] <= body["bursts"]
    lines = [json.loads(text) for text in out.read_text().splitlines()]
    assert [one["frame"] for one in lines] == list(range(body["frames"]))
    assert [one["t"] for one in lines] == pytest.approx([k / 200.0 for k in range(body["frames"])])
    assert sum(len(one["streaks"]) for one in lines) == body["streaks"]
    assert sum(len(one["bursts"]) for one in lines) == body["bursts"]
    assert all(len(streak) == 4 for one in lines for streak in one["streaks"])
    assert all(len(burst) == 3 and isinstance(burst[2], int) for one in lines for burst in one["bursts"])
    track = sum(math.dist(s[:2], s[2:]) for one in lines for s in one["streaks"]) * 2.0 / 1000.0
    assert track == pytest.approx(body["track_m"], rel=1e-3)


@pytest.mark.slow
def test_options_override_the_station_file(
    line: tuple[Path, list], tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """Half the scale is half the track, where no burst is: the burst net is told the scale, and what it takes for one
    has arms, which are no track. What is not overridden stays.
    """
    plain = np.random.default_rng(3).normal(9.0, 1.5, (40, 160, 240)).clip(0, 255).astype(np.uint8)
    for picture in plain:
        for y in range(30, 140, 16):
            cv2.line(picture, (60, (80 + y) // 2), (110, y), 90, 1, cv2.LINE_AA)
    clips = [write_pictures(tmp_path / "plain", plain), line[0]]
    station = tmp_path / "station.toml"
    station.write_text(
        "[optics]\nmm_per_px = 2.0\ncontact_px = [10, 80]\ndirection_deg = 0\nexposure_ms = 2.5\nfps = 200\n"
    )
    whole, half = (
        [measured(capsys, str(clip), "--station", str(station), *options) for clip in clips]
        for options in ((), ("--mm-per-px", "1"))
    )
    assert whole[0]["bursts"] == half[0]["bursts"] == 0
    assert whole[0]["track_m"] > 0.0
    assert half[0]["track_m"] == pytest.approx(whole[0]["track_m"] / 2.0)
    assert half[1]["track_m"] == pytest.approx(whole[1]["track_m"] / 2.0, rel=0.005)
    assert half[1]["contacts"][0]["begin_s"] == whole[1]["contacts"][0]["begin_s"]


def test_a_dark_clip_is_measured_as_nothing(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Noise without sparks: no contact, no NaN in the JSON, and a line for people."""
    rng = np.random.default_rng(1)
    folder = write_pictures(tmp_path / "dark", rng.normal(9.0, 2.0, (30, 64, 96)).clip(0, 255).astype(np.uint8))
    body = measured(capsys, str(folder), *OPTIONS)
    assert (body["frames"], body["contacts"]) == (30, [])
    assert body["reach_mm"] is None or body["streaks"] > 0
    assert main(["measure", str(folder), *OPTIONS]) == 0
    text = capsys.readouterr().out
    assert "30 frames" in text and "0 contacts" in text


def test_several_clips(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """One object a clip, in order."""
    for name in ("a", "b"):
        write_pictures(tmp_path / name, np.full((3, 48, 64), 9, np.uint8))
    assert main(["measure", str(tmp_path / "a"), str(tmp_path / "b"), *OPTIONS, "--json"]) == 0
    bodies = [json.loads(text) for text in capsys.readouterr().out.splitlines()]
    assert [Path(body["clip"]).name for body in bodies] == ["a", "b"]


@pytest.mark.parametrize(
    ("words", "status", "said"),
    [
        (["nothing.mkv"], 3, "no such file"),
        (["CLIP", "--mm-per-px", "-1"], 2, "mm_per_px"),
        (["CLIP", "--contact", "here"], 2, "--contact here"),
        (["CLIP", "--exposure-ms", "50", "--fps", "200"], 2, "exposure_ms"),
        (["CLIP", "--detections", "missing/folder/out.jsonl"], 3, "cannot be written"),
        (["CLIP", "--station", "absent.toml"], 2, "cannot be read"),
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
    """Exit status 2 or 3, one line on stderr."""
    monkeypatch.chdir(tmp_path)
    write_pictures(tmp_path / "CLIP", np.full((3, 48, 64), 9, np.uint8))
    assert main(["measure", *words]) == status
    captured = capsys.readouterr()
    assert said in captured.err
    assert captured.err.count("\n") == 1
    assert captured.out == ""


def test_a_damaged_clip(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Bytes that are no video, and a folder with a torn picture."""
    (tmp_path / "noise.mkv").write_bytes(bytes(range(256)) * 20)
    assert main(["measure", str(tmp_path / "noise.mkv"), *OPTIONS]) == 3
    folder = write_pictures(tmp_path / "torn", np.full((3, 48, 64), 9, np.uint8))
    good = cv2.imencode(".png", np.full((48, 64), 9, np.uint8))[1].tobytes()
    (folder / "000001.png").write_bytes(good[: len(good) // 3])
    assert main(["measure", str(folder), *OPTIONS]) == 3
    assert "Traceback" not in capsys.readouterr().err
