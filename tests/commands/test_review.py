"""``edgewatch review``: journalled bars judged again."""

import json
import time
from pathlib import Path

import numpy as np
import pytest

from edgewatch.commands.cli import main
from edgewatch.commands.review import figures_from, past_bars
from edgewatch.record.bandfiles import save_band
from edgewatch.record.journal import Entry, Journal
from edgewatch.record.reading import read_records
from edgewatch.wire import messages
from edgewatch.wire.messages import Stamp
from tests.bench.bench_judge import GRADES, draw, figures_of, taught, whole

STAMP = Stamp(boot="0123456789abcdef", monotonic_s=1.0, utc_s=1.7e9, synced=True)


@pytest.fixture
def station(tmp_path: Path) -> tuple[Path, Path]:
    """A journal of 12 bars of G45, every fourth of them foreign, all called inconclusive; and bands."""
    rng = np.random.default_rng(1)
    bands, file = tmp_path / "bands", tmp_path / "journal.sqlite"
    for grade in GRADES[1:4]:
        save_band(bands / f"{grade.grade}.toml", taught(grade, 20, rng))
    journal = Journal(file)
    for number in range(1, 13):
        windows = figures_of(draw(GRADES[3 if number % 4 == 0 else 1], rng))
        entries = [Entry(kind="window", body=messages.window(values=one, bar=number)) for one in windows]
        body = messages.bar(
            bar=number, expected="G45", verdict="inconclusive", values=whole(windows), causes=["no_band"]
        )
        journal.append([*entries, Entry(kind="bar", body=body)], stamp=STAMP)
    journal.close()
    return file, bands


def reviewed(capsys: pytest.CaptureFixture[str], station: tuple[Path, Path], *words: str) -> dict:
    """The JSON of a review."""
    file, bands = station
    assert main(["review", "--journal", str(file), "--bands", str(bands), *words, "--json"]) == 0
    return json.loads(capsys.readouterr().out)


def test_what_would_change(station: tuple[Path, Path], capsys: pytest.CaptureFixture[str]) -> None:
    """All twelve: nine conform, three do not; the foreign ones are named after what they look like."""
    body = reviewed(capsys, station)
    assert body["before"]["verdicts"] == {"inconclusive": 12}
    assert body["after"]["verdicts"] == {"conforming": 9, "nonconforming": 3}
    foreign = [one for one in body["changed"] if one["after"] == "nonconforming"]
    assert [one["bar"] for one in foreign] == [4, 8, 12]
    assert all(one["nearest"][0][0] == "G220" for one in foreign)


def test_confirmed_bars_are_counted(station: tuple[Path, Path], capsys: pytest.CaptureFixture[str]) -> None:
    """Laboratory findings: false alarms and misses before and after."""
    file, _ = station
    for number, grade in ((1, "G45"), (4, "G220"), (8, "G45")):  # the laboratory finds bar 8 to be right after all
        assert main(["journal", "--journal", str(file), "--confirm", str(number), grade]) == 0
    capsys.readouterr()
    body = reviewed(capsys, station)
    assert (body["before"]["confirmed"], body["before"]["false_alarms"]) == (3, 0)
    assert (body["after"]["false_alarms"], body["after"]["misses"]) == (1, 0)


def test_other_risks_and_windows(station: tuple[Path, Path], capsys: pytest.CaptureFixture[str]) -> None:
    """Options are taken; clear bars stay as they are."""
    body = reviewed(capsys, station, "--false-alarm", "0.0001", "--miss", "0.001", "--window-s", "1")
    assert body["after"]["verdicts"]["nonconforming"] == 3


def test_lines_for_people(station: tuple[Path, Path], capsys: pytest.CaptureFixture[str]) -> None:
    """What changes, then the counts."""
    file, bands = station
    assert main(["review", "--journal", str(file), "--bands", str(bands)]) == 0
    said = capsys.readouterr().out
    assert "bar 4: expected G45: inconclusive -> nonconforming" in said
    assert "12 bars, 12 would change" in said


def test_numbers_that_begin_anew_do_not_mix(tmp_path: Path) -> None:
    """Two bars of the same number: each has its own windows, the finding belongs to the newer."""
    rng = np.random.default_rng(2)
    journal = Journal(tmp_path / "j.sqlite")
    lengths = []
    for _ in range(2):
        windows = figures_of(draw(GRADES[1], rng))[: 5 + len(lengths)]
        lengths.append(len(windows))
        body = messages.bar(bar=1, expected="G45", verdict="conforming", values=whole(windows))
        entries = [Entry(kind="window", body=messages.window(values=one, bar=1)) for one in windows]
        journal.append([*entries, Entry(kind="bar", body=body)], stamp=STAMP)
    journal.close()
    bars = list(past_bars(read_records(tmp_path / "j.sqlite", ("window", "bar")), {1: "G90"}))
    assert [len(bar.windows) for bar in bars] == lengths
    assert [bar.confirmed for bar in bars] == ["", "G90"]


def test_figures_survive_the_journal() -> None:
    """Null is NaN again; a record that lacks figures is none."""
    one = figures_of(draw(GRADES[1], np.random.default_rng(3)))[0]
    payload = messages.plain(messages.window(values=one, bar=1))
    found = figures_from(payload)
    assert found is not None
    assert (found.bursts, found.track_m) == (one.bursts, one.track_m)
    assert found.burst_rate_low_per_m != found.burst_rate_low_per_m  # NaN
    del payload["track_m"]
    assert figures_from(payload) is None
    assert figures_from({**payload, "track_m": "long"}) is None


@pytest.mark.parametrize(
    ("words", "status", "said"),
    [
        (["--journal", "absent.sqlite", "--bands", "BANDS"], 3, "absent.sqlite: is not there"),
        (["--journal", "FILE", "--bands", "absent"], 2, "holds no band file"),
        (["--journal", "FILE", "--bands", "BANDS", "--false-alarm", "3"], 2, "--false-alarm 3: allowed"),
    ],
)
def test_mistakes_are_one_line(
    words: list[str], status: int, said: str, station: tuple[Path, Path], capsys: pytest.CaptureFixture[str]
) -> None:
    """Exit status 2 or 3, one line."""
    file, bands = station
    swap = {"FILE": str(file), "BANDS": str(bands)}
    assert main(["review", *(swap.get(word, word) for word in words)]) == status
    error = capsys.readouterr().err
    assert said in error and error.count("\n") == 1


def test_many_bars_take_seconds(station: tuple[Path, Path]) -> None:
    """A bar takes a few milliseconds, so a shift of bars is judged anew in seconds (generous: a defect, not a race)."""
    file, bands = station
    begun = time.perf_counter()
    assert main(["review", "--journal", str(file), "--bands", str(bands), "--json"]) == 0
    assert time.perf_counter() - begun < 12 * 0.25 + 1.0
