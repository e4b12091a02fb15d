"""``edgewatch rehearse``, run as a user does, on a small, short line."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
from pathlib import Path

import pytest

from tests.station.mill import OPTICS, SIZE, edgewatch, toml

TOP = Path(__file__).parents[2]


@pytest.fixture
def station(tmp_path: Path) -> Path:
    """A station file with a small picture; the bands are those that ship for the rehearsal."""
    path = tmp_path / "station.toml"
    sections = {
        "source": {"uri": "rehearsal:", **SIZE},
        "optics": OPTICS,
        "judge": {"bands": str(TOP / "calib" / "bands"), "expect": "C45"},
        "rehearsal": {"contact_s": 0.6, "pause_s": 0.4, "seed": 5},
    }
    path.write_text(toml(sections), encoding="utf-8")
    return path


def words(station: Path, *more: str) -> list[str]:
    """The command."""
    return ["rehearse", "--station", str(station), "--no-broker", "--json", "--foreign", "0", *more]


@pytest.mark.slow
def test_one_core_or_two_the_same_bars(station: Path, tmp_path: Path) -> None:
    """Drawn in its own process or, where there is one core, in the same: every figure of every bar is equal."""
    apart = edgewatch(*words(station, "--bars", "2", "--folder", "a"), folder=tmp_path)
    alone = subprocess.run(
        [
            *(sys.executable, "-c"),
            "import os, sys; os.sched_setaffinity(0, {min(os.sched_getaffinity(0))})\n"
            "from edgewatch.commands.cli import main; sys.exit(main())",
            *words(station, "--bars", "2", "--folder", "b"),
        ],
        cwd=tmp_path,
        capture_output=True,
        text=True,
        timeout=300,
        env={**os.environ, "PYTHONPATH": str(TOP)},
        check=False,
    )
    assert apart.returncode == alone.returncode
    assert apart.returncode in (0, 1), apart.stderr  # what these bands say of so small a picture is no matter here
    *bars, result = [json.loads(line) for line in apart.stdout.splitlines()]
    *others, other = [json.loads(line) for line in alone.stdout.splitlines()]
    assert len(bars) == result["bars_judged"] == 2
    assert bars == others
    changing = ("seconds", "journal", "evidence")
    assert {k: v for k, v in result.items() if k not in changing} == {
        k: v for k, v in other.items() if k not in changing
    }


@pytest.mark.slow
@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM])
def test_a_signal_to_all_of_it_ends_it_in_good_order(number: signal.Signals, station: Path, tmp_path: Path) -> None:
    """As Ctrl-C in a terminal and a service manager do: the result is told, no traceback, and nobody is left."""
    with subprocess.Popen(
        [sys.executable, "-m", "edgewatch", *words(station, "--bars", "1000", "--folder", "c")],
        cwd=tmp_path,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        start_new_session=True,
        env={**os.environ, "PYTHONPATH": str(TOP)},
    ) as process:
        assert process.stdout is not None
        first = json.loads(process.stdout.readline())
        os.killpg(process.pid, number)
        told, said = process.communicate(timeout=60.0)
    assert first["bar"] == 1
    assert said == ""
    result = json.loads(told.splitlines()[-1])
    assert result["bars_judged"] >= 1
    assert process.returncode in (0, 1)
    with pytest.raises(ProcessLookupError):
        os.killpg(process.pid, 0)
