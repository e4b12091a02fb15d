"""The ``check`` command: each part of the station in order, and each fault named with its exit status."""

from __future__ import annotations

import json
import os
import threading
from collections.abc import Callable
from pathlib import Path
from types import SimpleNamespace
from typing import Any

import numpy as np
import pytest

from edgewatch.commands import check as command
from edgewatch.commands.cli import main
from edgewatch.record.journal import Entry, Journal
from tests.brokers import Broker, Reader, make_certificates, running
from tests.clips import write_clip
from tests.record.entries import bar, stamp

Check = Callable[..., tuple[int, dict[str, list[tuple[str, str]]], str]]


def dark_clip(path: Path, count: int = 12) -> Path:
    """A clip of dark pictures with a camera's offset and noise."""
    rng = np.random.default_rng(1)
    pictures = np.clip(rng.normal(9.0, 1.6, (count, 120, 160)), 0, 255).astype(np.uint8)
    return write_clip(path, pictures)


@pytest.fixture
def check(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> Check:
    """Run the command with a station file of the text given, on a sound clip unless told otherwise."""
    clip = dark_clip(tmp_path / "clip.mkv")

    def run(text: str = "", *words: str, source: str = "") -> tuple[int, dict[str, list[tuple[str, str]]], str]:
        (tmp_path / "station.toml").write_text(text)
        options = ["--station", str(tmp_path / "station.toml"), "--source", source or str(clip), *words]
        status = main(["check", "--json", *options])
        out, err = capsys.readouterr()
        found: dict[str, list[tuple[str, str]]] = {}
        if out:
            document: dict[str, Any] = json.loads(out)
            assert document["fit"] == (status == 0)
            for one in document["findings"]:
                found.setdefault(one["check"], []).append((one["result"], one["detail"]))
        lines = [line for line in err.splitlines() if "checking" not in line]
        assert len(lines) == (1 if status in (2, 3) else 0), err
        return status, found, "".join(lines)

    return run


def test_a_sound_station(check: Check) -> None:
    """Every check is made and none complains."""
    status, found, _ = check()
    assert status == 0
    assert list(found) == [
        *(
            "configuration",
            "sight",
            "source",
            "pictures",
            "bands",
            "broker",
            "relay",
            "contact input",
            "journal",
            "evidence",
            "disk",
            "clock",
        )
    ]
    assert found["source"][0][0] == "good" and "12 pictures of 160 x 120 px" in found["source"][0][1]
    assert found["broker"] == [("note", "mqtt.enabled = false: not used")]


def test_table_for_people(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Without --json: a line a finding."""
    assert main(["check", "--source", str(dark_clip(tmp_path / "clip.mkv")), "--journal", str(tmp_path / "j")]) == 0
    out = capsys.readouterr().out
    assert [line.split()[0] for line in out.splitlines()][:4] == ["configuration", "sight", "source", "pictures"]


@pytest.mark.parametrize(
    ("source", "status", "says"),
    [
        ("camera:/dev/nowhere", 3, "there is no such device"),
        ("clip:nowhere.mkv", 3, "no such file"),
        ("stream:http://127.0.0.1:9/", 3, "no server"),
        ("webcam:0", 2, "no such kind of source"),
    ],
)
def test_source_that_is_not_there(check: Check, source: str, status: int, says: str) -> None:
    """A missing source is exit status 3, one that cannot be 2; the other checks are made all the same."""
    found_status, found, line = check(source=source)
    assert found_status == status
    assert says in line and says in found["source"][0][1]
    assert "clock" in found


def test_pictures_that_show_nothing(check: Check, tmp_path: Path) -> None:
    """A lens cap (no offset, no noise) and a lamp in the picture are found."""
    black = write_clip(tmp_path / "black.mkv", np.zeros((12, 120, 160), np.uint8))
    status, found, _ = check(source=str(black))
    assert status == 1
    assert any(detail.startswith("no_light") for _, detail in found["pictures"])
    white = write_clip(tmp_path / "white.mkv", np.full((12, 120, 160), 255, np.uint8))
    status, found, _ = check(source=str(white))
    assert status == 1
    assert any(detail.startswith("saturated") for _, detail in found["pictures"])


def test_rate_of_a_live_source(check: Check, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A live FIFO that is fed at half the configured rate is unfit; at the right rate it is good."""
    monkeypatch.setattr(command, "LOOK_S", 0.6)
    fifo = tmp_path / "frames"
    os.mkfifo(fifo)
    rng = np.random.default_rng(2)
    picture = np.clip(rng.normal(9.0, 1.6, (120, 160)), 0, 255).astype(np.uint8).tobytes()
    results = []
    for period_s in (0.02, 0.04):
        done = threading.Event()

        def feed(period_s: float = period_s, done: threading.Event = done) -> None:
            with fifo.open("wb", buffering=0) as pipe:
                try:
                    while not done.wait(period_s):
                        pipe.write(picture)
                except BrokenPipeError:
                    return

        feeder = threading.Thread(target=feed)
        feeder.start()
        text = "[source]\nwidth_px = 160\nheight_px = 120\n[optics]\nfps = 50\n"
        status, found, _ = check(text, source=f"pipe:{fifo}")
        done.set()
        feeder.join()
        results.append((status, found["source"][0][0]))
    assert results == [(0, "good"), (1, "unfit")]


def test_bands(check: Check, tmp_path: Path) -> None:
    """An expected grade without a band is unfit; a band file that cannot be read is a mistake, exit status 2."""
    status, found, _ = check("[judge]\nexpect = 'C45'\n")
    assert status == 1 and found["bands"][-1] == ("unfit", "judge.expect = C45: no band of it is taught")
    (tmp_path / "bands").mkdir()
    (tmp_path / "bands" / "C45.toml").write_text("grade = 45\n")
    status, found, line = check()
    assert status == 2 and "C45.toml" in line and found["bands"][0][0] == "wrong"


def test_broker_lets_us_in_and_hears_nothing(check: Check, tmp_path: Path) -> None:
    """A real Mosquitto with passwords: right, wrong, and none; nothing at all is published."""
    (tmp_path / "password").write_text("right\n")
    (tmp_path / "password").chmod(0o600)
    broker = Broker(tmp_path / "broker", passwords={"wheel-a": "right", "reader": "r"})
    with running(broker):
        reader = Reader(broker, "#", "-u", "reader", "-P", "r")
        text = f"[mqtt]\nenabled = true\nhost = '127.0.0.1'\nport = {broker.port}\nuser = 'wheel-a'\n"
        status, found, _ = check(text + "password_file = 'password'\n")
        assert status == 0 and found["broker"][0][0] == "good"
        (tmp_path / "password").write_text("wrong\n")
        status, found, _ = check(text + "password_file = 'password'\n")
        assert status == 1 and ("refuses" in found["broker"][0][1] or "does not allow" in found["broker"][0][1])
        (tmp_path / "password").chmod(0o644)
        status, _, line = check(text + "password_file = 'password'\n")
        assert status == 2 and "others may read it" in line
        reader.stop()
        assert reader.seen == []
    status, found, line = check(text)
    assert status == 3 and "no broker answers" in line


def test_broker_with_an_expired_certificate(check: Check, tmp_path: Path) -> None:
    """The certificate is verified, and what is wrong with it is named."""
    certificates = make_certificates(tmp_path / "tls", expired=True)
    broker = Broker(tmp_path / "broker", tls=certificates)
    with running(broker):
        text = f"[mqtt]\nenabled = true\nport = {broker.port}\ntls = true\nca_file = '{certificates.ca}'\n"
        status, found, _ = check(text)
    assert status == 1 and "has expired" in found["broker"][0][1]


def test_relay(check: Check) -> None:
    """A port that is not there is exit status 3; an energise-to-stop wiring is worth a note."""
    status, _, line = check("[relay]\nkind = 'line'\nport = '/dev/nowhere'\n")
    assert status == 3 and "relay" in line
    status, found, _ = check("[relay]\nkind = 'line'\nport = 'loop://'\nenergise_to = 'stop'\n")
    assert status == 0
    assert [result for result, _ in found["relay"]] == ["good", "note"]


def test_contact_input(check: Check) -> None:
    """A port that can be read says whether a bar is at the wheel; one that is not there is exit status 3."""
    status, found, _ = check("[contact]\nport = 'loop://'\nline = 'cts'\n")  # the loop wires RTS to CTS
    assert status == 0 and found["contact input"] == [("good", "cts at loop://: a bar is at the wheel")]
    status, _, line = check("[contact]\nport = '/dev/nowhere'\n")
    assert status == 3 and "contact /dev/nowhere: cannot be opened" in line


def test_journal_whole_and_damaged(check: Check, tmp_path: Path) -> None:
    """A journal is checked and left as it is; a damaged one is unfit; a folder that is a file cannot be written."""
    path = tmp_path / "edgewatch.sqlite"
    journal = Journal(path)
    journal.append([Entry(kind="bar", body=bar(1).body)], stamp=stamp())
    journal.close()
    before = path.read_bytes()
    status, found, _ = check()
    assert status == 0 and "whole, 1 messages unsent" in found["journal"][-1][1]
    assert path.read_bytes() == before
    path.write_bytes(before[:100] + bytes(len(before) - 100))
    status, found, _ = check()
    assert status == 1 and found["journal"][-1][0] == "unfit"
    status, found, _ = check("[journal]\nfile = 'clip.mkv/j.sqlite'\n")
    assert status == 1 and "cannot be written" in found["journal"][0][1]


def test_disk_too_small(check: Check) -> None:
    """A journal that may grow beyond the disk is unfit."""
    status, found, _ = check("[journal]\nmost_mb = 1e6\n[evidence]\nfolder = ''\n")
    assert status == (1 if found["disk"][0][0] == "unfit" else 0)
    free_mb = float(found["disk"][0][1].split()[0])
    assert (found["disk"][0][0] == "unfit") == (free_mb < 1e6)
    assert found["evidence"][0][0] == "note"


@pytest.mark.parametrize(
    ("text", "source", "result"),
    [
        ("", "camera:/dev/nowhere", "unfit"),
        ("[judge]\nclock_must_sync = false\n", "camera:/dev/nowhere", "note"),
        ("", "clip:nowhere.mkv", "note"),
    ],
)
def test_a_clock_that_nobody_sets(
    check: Check, monkeypatch: pytest.MonkeyPatch, text: str, source: str, result: str
) -> None:
    """A camera's bars would not conform: unfit, with the key that says otherwise; else worth a note."""
    monkeypatch.setattr("edgewatch.commands.check.Clock", lambda: SimpleNamespace(synced=False))
    _, found, _ = check(text, source=source)
    ((said, detail),) = found["clock"]
    assert (said, "judge.clock_must_sync" in detail) == (result, result == "unfit")


def test_configuration_that_cannot_be_used(check: Check) -> None:
    """Wrong keys end the command at once: exit status 2, nothing on stdout."""
    status, found, line = check("[optics]\nfsp = 5\n")
    assert (status, found) == (2, {})
    assert "optics.fsp = 5" in line
