"""Nothing that a user can get wrong gives a traceback: exit status 2 or 3, one line on stderr that says what to do."""

from __future__ import annotations

from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from edgewatch.commands.cli import COMMANDS, main
from tests.clips import noise_pictures, write_clip

OPTICS = ["--mm-per-px", "1", "--contact", "5,30", "--direction", "0", "--exposure-ms", "2", "--fps", "100"]


def run(capsys: pytest.CaptureFixture[str], *words: str) -> tuple[int, str]:
    """Exit status and stderr; a usage error ends like a program."""
    try:
        status = main(list(words))
    except SystemExit as ended:
        status = int(ended.code or 0)
    return status, capsys.readouterr().err


@pytest.fixture
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """A folder to be in, with a good clip and some bad files."""
    monkeypatch.chdir(tmp_path)
    write_clip(Path("good.mkv"), noise_pictures(3))
    Path("empty.mkv").write_bytes(b"")
    Path("text.mkv").write_text("this is no video")
    Path("half.mkv").write_bytes(Path("good.mkv").read_bytes()[:700])
    Path("bad.toml").write_text("[optics\nmm_per_px = ")
    Path("latin.toml").write_bytes("[station]\nsite = 'M\xfchle'".encode("latin-1"))
    Path("zero.toml").write_bytes(b"\0" * 100)
    Path("wrong.toml").write_text("[optics]\nmm_per_px = -1\n[relay]\nkind = 'pneumatic'\n")
    Path("station").mkdir()
    return tmp_path


@pytest.mark.parametrize(
    ("words", "status", "says"),
    [
        (["measure", "missing.mkv", *OPTICS], 3, "missing.mkv"),
        (["measure", "empty.mkv", *OPTICS], 3, "empty.mkv"),
        (["measure", "text.mkv", *OPTICS], 3, "text.mkv"),
        (["measure", "half.mkv", *OPTICS], 3, "half.mkv"),
        (["measure", "station", *OPTICS], 3, "station"),
        (["measure", "good.mkv", "--fps", "0"], 2, "fps"),
        (["measure", "good.mkv", "--fps", "nan"], 2, "fps"),
        (["measure", "good.mkv", "--mm-per-px", "inf"], 2, "mm_per_px"),
        (["measure", "good.mkv", "--contact", "5"], 2, "--contact 5"),
        (["measure", "good.mkv", "--contact", "a,b"], 2, "--contact a,b"),
        (["measure", "good.mkv", "--exposure-ms", "50", "--fps", "100"], 2, "exposure_ms"),
        (["measure", "good.mkv", "--station", "missing.toml"], 2, "missing.toml"),
        (["measure", "good.mkv", "--station", "bad.toml"], 2, "bad.toml"),
        (["measure", "good.mkv", "--station", "latin.toml"], 2, "not UTF-8"),
        (["measure", "good.mkv", "--station", "zero.toml"], 2, "zero.toml"),
        (["measure", "good.mkv", "--station", "wrong.toml"], 2, "relay.kind = 'pneumatic': allowed is one of \"none\""),
        (["measure", "good.mkv", "--station", "station"], 2, "station"),
        (["measure", "good.mkv", *OPTICS, "--detections", "no/such/folder.jsonl"], 3, "no/such/folder.jsonl"),
        (["watch"], 2, "source.uri"),
        (["watch", "--source", "camera:/dev/video99"], 3, "/dev/video99"),
        (["watch", "--source", "telepathy:wheel"], 2, "telepathy:wheel"),
        (["watch", "--source", "clip:text.mkv"], 3, "text.mkv"),
        (["watch", "--source", "pipe:missing"], 3, "missing"),
        (["watch", "--source", "clip:good.mkv", "--expect", "../C45"], 2, "judge.expect"),
        (["watch", "--source", "clip:good.mkv", "--pace", "leisurely"], 2, "--pace"),
        (["watch", "--source", "clip:good.mkv", "--journal", "station"], 3, "station"),
        (["watch", "--source", "clip:good.mkv", "--journal", "text.mkv"], 3, "text.mkv"),
        (["teach", "C45", "missing.mkv", *OPTICS], 3, "missing.mkv"),
        (["teach", "C45", "good.mkv", *OPTICS], 2, "reference bars"),
        (["teach", "../x", "good.mkv", *OPTICS], 2, "GRADE"),
        (["teach", "C45"], 2, "CLIP"),
        (["teach", "C45", "good.mkv", "--add", "wrong.toml", *OPTICS], 2, "wrong.toml"),
        (["journal", "--journal", "missing.sqlite"], 3, "missing.sqlite"),
        (["journal", "--journal", "text.mkv"], 3, "text.mkv"),
        (["contrast", "--bands", "missing"], 2, "missing"),
        (["review", "--journal", "missing.sqlite"], 2, "judge.bands"),
        (["scale", "missing.png"], 2, "--board"),
        (["scale", "missing.png", "--board", "9x6", "--square-mm", "5"], 3, "missing.png"),
        (["rehearse", "--bars", "0"], 2, "--bars 0"),
        (["rehearse", "--bars", "2", "--foreign", "3"], 2, "--foreign 3"),
        (["rehearse", "--grade", "Unobtainium"], 2, "Unobtainium"),
        (["fly"], 2, "fly"),
        ([], 2, "COMMAND"),
    ],
    ids=lambda value: " ".join(value) if isinstance(value, list) else "",
)
def test_mistakes_are_one_line(
    capsys: pytest.CaptureFixture[str], folder: Path, words: list[str], status: int, says: str
) -> None:
    """Status as documented; the line names what is wrong."""
    before = sorted(path.name for path in folder.iterdir() if not path.name.startswith("rehearsal-"))
    found, line = run(capsys, *words)
    assert (found, line.count("\n")) == (status, 1), line
    assert says in line
    assert before == sorted(p.name for p in folder.iterdir() if not p.name.startswith(("rehearsal-", "edgewatch")))


@pytest.mark.parametrize("command", COMMANDS)
def test_every_command_explains_itself(capsys: pytest.CaptureFixture[str], command: str) -> None:
    """``--help`` ends well and shows an example."""
    with pytest.raises(SystemExit) as ended:
        main([command, "--help"])
    assert ended.value.code == 0
    assert f"edgewatch {command}" in capsys.readouterr().out.partition("example")[2]


def test_a_contact_point_left_of_the_picture_is_no_option(capsys: pytest.CaptureFixture[str], folder: Path) -> None:
    """``--contact -20,30`` as people write it, and with an equals sign."""
    rest = ["--mm-per-px", "1", "--direction", "-90", "--exposure-ms", "2", "--fps", "100", "--json"]
    assert run(capsys, "measure", "good.mkv", "--contact", "-20,30", *rest)[0] == 0
    assert run(capsys, "measure", "good.mkv", "--contact=-20.5,-30", *rest)[0] == 0
    assert folder.is_dir()


@settings(max_examples=60, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(data=st.binary(max_size=400))
def test_any_bytes_as_configuration(capsys: pytest.CaptureFixture[str], tmp_path: Path, data: bytes) -> None:
    """Whatever is in the file: a clear refusal, or a configuration (then the clip is missing)."""
    file = tmp_path / "station.toml"
    file.write_bytes(data)
    status, line = run(capsys, "measure", str(tmp_path / "missing.mkv"), "--station", str(file))
    assert status in (2, 3)
    assert line.count("\n") == 1
