"""The main job, end to end: teach from clips, watch another clip, find the foreign bar everywhere it must be said."""

from __future__ import annotations

import itertools
import json
import shutil
import subprocess
from collections.abc import Iterator
from pathlib import Path

import pytest

from edgewatch.rehearsal.line import Bar
from tests.brokers import Broker, Reader, running, wait_until
from tests.relay.boards import LineServer, board
from tests.station.mill import OPTICS, OPTIONS, SIZE, edgewatch, line_clip, lines, toml

pytestmark = pytest.mark.slow

ON, OFF = bytes.fromhex("A00101A2"), bytes.fromhex("A00100A1")


@pytest.fixture(scope="module")
def mill(tmp_path_factory: pytest.TempPathFactory) -> Iterator[tuple[Path, list[Bar]]]:
    """Bands of two grades taught from clips, and a third clip of five bars, one of them foreign."""
    folder = tmp_path_factory.mktemp("mill")
    for grade, seed in (("C15", 21), ("C80", 22)):
        clip = folder / f"{grade}.mkv"
        line_clip(clip, grade=grade, bars=6, seed=seed)
        done = edgewatch("teach", grade, clip, "--out", folder / "bands" / f"{grade}.toml", *OPTIONS, folder=folder)
        assert done.returncode == 0, done.stderr
    truth = line_clip(folder / "shift.mkv", grade="C80", bars=5, foreign=1, foreign_grade="C15", seed=23)
    assert sum(bar.grade != bar.expected for bar in truth) == 1
    yield folder, truth
    shutil.rmtree(folder)


def verdicts(truth: list[Bar]) -> list[str]:
    """What must come out."""
    return ["conforming" if bar.grade == bar.expected else "nonconforming" for bar in truth]


def test_options_alone_suffice(mill: tuple[Path, list[Bar]], tmp_path: Path) -> None:
    """No station file: a line a bar, exactly the foreign bar nonconforming, by name."""
    folder, truth = mill
    words = ("--source", f"clip:{folder / 'shift.mkv'}", "--expect", "C80", "--bands", folder / "bands", "--json")
    found = lines(edgewatch("watch", *words, *OPTIONS, folder=tmp_path))
    assert [line["verdict"] for line in found] == verdicts(truth)
    assert [line["bar"] for line in found] == [1, 2, 3, 4, 5]
    for line, bar in zip(found, truth, strict=True):
        assert line["begin_s"] == pytest.approx(bar.begin_s, abs=0.05)
        assert line["end_s"] == pytest.approx(bar.end_s, abs=0.25)
        assert line["nearest"][0][0] == bar.grade
        assert 0 < line["decided_after_s"] <= line["end_s"] - line["begin_s"] + 0.011


def test_the_foreign_bar_is_on_journal_broker_and_relay(mill: tuple[Path, list[Bar]], tmp_path: Path) -> None:
    """The whole station: the journal, what mosquitto_sub reads, the byte-frame board, and the pictures agree."""
    folder, truth = mill
    foreign = next(number for number, bar in enumerate(truth, start=1) if bar.grade != bar.expected)
    broker = Broker(tmp_path / "broker")
    with running(broker), board({ON: True, OFF: False}, lambda frame: [(0.0, frame)]) as relay:
        reader = Reader(broker).ready(broker)
        (tmp_path / "station.toml").write_text(
            toml(
                {
                    "station": {"site": "hollowmere", "line": "peel-2", "name": "wheel-a"},
                    "source": {"uri": f"clip:{folder / 'shift.mkv'}", **SIZE},
                    "optics": OPTICS,
                    "judge": {"bands": str(folder / "bands"), "expect": "C80"},
                    "mqtt": {"enabled": True, "host": "127.0.0.1", "port": broker.port},
                    "relay": {
                        "kind": "frames",
                        "port": relay.port,
                        "on_frame": ON.hex(),
                        "off_frame": OFF.hex(),
                        "on_answer": ON.hex(),
                        "off_answer": OFF.hex(),
                    },
                }
            )
        )
        told = lines(edgewatch("watch", "--json", folder=tmp_path))
        wait_until(lambda: any(m.payload["state"] == "offline" for m in reader.on("presence")), "the station to leave")
        reader.stop()
        levels = [level for level, _ in itertools.groupby(relay.requests)]  # a level is repeated now and then as proof
        assert levels == [ON, OFF]  # energised to run, released by the foreign bar, and it stays so
        assert not relay.energised
    assert [line["verdict"] for line in told] == verdicts(truth)
    bars = {m.payload["bar"]: m.payload["verdict"] for m in reader.on("bar")}
    assert [bars[number] for number in sorted(bars)] == verdicts(truth)
    alerts = [m.payload for m in reader.on("alert") if m.payload["alert"].startswith("nonconforming_bar")]
    assert [(one["bar"], one["state"]) for one in alerts] == [(foreign, "raised")]
    seqs = sorted(set(reader.seqs()))
    assert seqs == list(range(seqs[0], seqs[0] + len(seqs)))
    switches = [m.payload for m in reader.on("relay") if "seq" in m.payload]  # without: the state sent on connecting
    assert [(one["wanted"], one["read_back"]) for one in switches] == [("run", "run"), ("stop", "stop")]
    journal = lines(edgewatch("journal", "bars", "--json", folder=tmp_path))
    assert [row["verdict"] for row in journal] == verdicts(truth)
    pictures = sorted(path.name for path in (tmp_path / "evidence").rglob("*.jpg"))
    assert pictures == sorted(next(m.payload for m in reader.on("bar") if m.payload["bar"] == foreign)["pictures"])
    assert pictures


def test_the_control_line_drops_for_the_foreign_bar(mill: tuple[Path, list[Bar]], tmp_path: Path) -> None:
    """RTS, energised to run, over a real socket: high while bars conform, low once one does not, also at the end."""
    folder, _ = mill
    server = LineServer()
    try:
        (tmp_path / "station.toml").write_text(
            toml(
                {
                    "source": {"uri": f"clip:{folder / 'shift.mkv'}", **SIZE},
                    "optics": OPTICS,
                    "judge": {"bands": str(folder / "bands"), "expect": "C80"},
                    "relay": {"kind": "line", "port": server.url, "control_line": "rts", "sense_line": "cts"},
                }
            )
        )
        lines(edgewatch("watch", "--json", folder=tmp_path))
        switches = lines(edgewatch("journal", "relay", "--json", folder=tmp_path))
        assert [(one["wanted"], one["read_back"]) for one in switches] == [("run", "run"), ("stop", "stop")]
        assert not server.serial.rts
    finally:
        server.close()


def test_a_grabber_feeds_the_station_through_a_pipe(mill: tuple[Path, list[Bar]], tmp_path: Path) -> None:
    """``ffmpeg … -f rawvideo - | edgewatch watch --source pipe:-`` finds the same bars as the clip itself."""
    folder, truth = mill
    (tmp_path / "station.toml").write_text(toml({"source": SIZE, "optics": OPTICS}))
    grab = ["ffmpeg", "-loglevel", "error", "-i", str(folder / "shift.mkv"), "-f", "rawvideo", "-pix_fmt", "gray", "-"]
    with subprocess.Popen(grab, stdout=subprocess.PIPE) as grabber:
        words = ("--source", "pipe:-", "--expect", "C80", "--bands", folder / "bands", "--json")
        found = lines(edgewatch("watch", *words, folder=tmp_path, stdin=grabber.stdout))
    assert [line["verdict"] for line in found] == verdicts(truth)


def test_measure_says_what_the_clip_holds(mill: tuple[Path, list[Bar]], tmp_path: Path) -> None:
    """One object, the contract's keys, a line a frame, every contact found."""
    folder, truth = mill
    out = tmp_path / "seen.jsonl"
    done = edgewatch("measure", folder / "shift.mkv", "--json", "--detections", out, *OPTIONS, folder=tmp_path)
    (found,) = lines(done)
    frames = [json.loads(line) for line in out.read_text().splitlines()]
    assert len(frames) == found["frames"]
    assert [frame["frame"] for frame in frames] == list(range(len(frames)))
    assert sum(len(frame["streaks"]) for frame in frames) == found["streaks"]
    assert sum(len(frame["bursts"]) for frame in frames) == found["bursts"]
    assert found["seconds"] == pytest.approx(found["frames"] / 100)
    assert len(found["contacts"]) == len(truth)
    assert found["burst_rate_low_per_m"] < found["burst_rate_per_m"] < found["burst_rate_high_per_m"]
    assert {"median", "p95"} <= set(found["processing_ms"])
