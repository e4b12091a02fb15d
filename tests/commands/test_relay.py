"""The ``relay`` command, on a board behind a pty and on pyserial's loop."""

from __future__ import annotations

import json
from collections.abc import Iterator
from pathlib import Path

import pytest

from edgewatch.commands import relay as command
from edgewatch.commands.cli import main
from edgewatch.record.journal import Journal
from edgewatch.relay.port import open_relay
from edgewatch.settings import RelaySettings
from edgewatch.wire.relayframes import crc16, read_coil, write_coil
from tests.relay.boards import Board

ON, OFF, ASK = write_coil(1, 0, True), write_coil(1, 0, False), read_coil(1, 0)


class Coil:
    """A Modbus board with one coil; ``welded`` keeps its contact closed."""

    def __init__(self) -> None:
        self.level = self.welded = False
        self.board = Board({ON: True, OFF: False, ASK: False}, self._answer)

    def _answer(self, request: bytes) -> list[tuple[float, bytes]]:
        if request != ASK:
            self.level = request == ON
            return [(0.0, request)]
        body = bytes((1, 1, 1, int(self.level or self.welded)))
        return [(0.0, body + crc16(body).to_bytes(2, "little"))]


@pytest.fixture
def coil(tmp_path: Path) -> Iterator[Coil]:
    """A board, and the station file beside it."""
    made = Coil()
    (tmp_path / "station.toml").write_text(
        f'[relay]\nkind = "modbus"\nport = "{made.board.port}"\nbaud = 115200\n[journal]\nfile = "j.sqlite"\n'
    )
    yield made
    made.board.pull()


@pytest.fixture
def relay(tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch) -> object:
    """Run the command on that station file."""
    monkeypatch.setattr(command, "PAUSE_S", 0.0)  # no machine is switched here

    def run(*words: str) -> tuple[int, str, str]:
        status = main(["relay", *words, "--station", str(tmp_path / "station.toml")])
        out, err = capsys.readouterr()
        return status, out, err

    return run


def test_state_is_read_without_switching(coil: Coil, relay) -> None:  # type: ignore[no-untyped-def]
    """Both levels are read; the board gets no write."""
    for coil.level, line in ((True, "run"), (False, "stop")):
        status, out, _ = relay("state", "--json")
        assert (status, json.loads(out)) == (0, {"line": line})
    assert set(coil.board.requests) == {ASK}


def test_run_and_stop_stay_on_the_board(coil: Coil, relay) -> None:  # type: ignore[no-untyped-def]
    """The level stays when the command ends; to run needs --yes; the caution is printed."""
    status, out, err = relay("run", "--yes", "--json")
    assert status == 0 and coil.level is True
    assert json.loads(out)["read_back"] == "run"
    assert "never a safety function" in err
    assert relay("run")[0] == 2 and "add --yes" in relay("run")[2]
    assert relay("stop")[:1] == (0,) and coil.level is False


def test_welded_contact_is_found(coil: Coil, relay) -> None:  # type: ignore[no-untyped-def]
    """A relay that does not release: exit status 1, from ``stop`` and from ``test``."""
    coil.welded = True
    status, out, _ = relay("stop")
    assert status == 1 and "stop: reads back as run" in out
    status, out, _ = relay("test", "--yes", "--cycles", "2", "--json")
    assert status == 1
    assert json.loads(out)["wrong"] == 2


def test_test_ends_stopped(coil: Coil, relay) -> None:  # type: ignore[no-untyped-def]
    """A test switches there and back as often as asked, tells the times, and leaves the line stopped."""
    status, out, _ = relay("test", "--yes", "--cycles", "2")
    assert status == 0 and coil.level is False
    assert [line.split()[0] for line in out.splitlines()] == ["run", "stop", "run", "stop", "4"]
    assert "0 wrong" in out


def test_latched_stop_is_released_by_hand(coil: Coil, relay, tmp_path: Path) -> None:  # type: ignore[no-untyped-def]
    """The journal then remembers *run*, who released and what; the line itself is not switched."""
    assert relay("release")[0] == 3  # no journal yet
    journal = Journal(tmp_path / "j.sqlite")
    journal.set_state("stop", {"state": "latched", "reason": "bar 7 nonconforming"})
    journal.close()
    status, out, err = relay("release", "--who", "foreman", "--json")
    assert (status, json.loads(out)) == (0, {"released": True, "reason": "bar 7 nonconforming"})
    assert "may run as soon as the station is started" in err
    journal = Journal(tmp_path / "j.sqlite")
    assert journal.state("stop")["state"] == "run"
    (row,) = journal.rows("relay")
    journal.close()
    assert (row.payload["who"], row.payload["wanted"]) == ("foreman", "run")
    assert "bar 7 nonconforming" in row.payload["reason"]
    assert relay("release")[1] == "no stop is latched\n"
    assert set(coil.board.requests) <= {ASK}


def test_running_station_keeps_its_relay(coil: Coil, relay) -> None:  # type: ignore[no-untyped-def]
    """While another program has the port nothing is switched and nothing released."""
    other = open_relay(RelaySettings(kind="modbus", port=coil.board.port))
    for words in (("state",), ("run", "--yes"), ("release",)):
        status, _, err = relay(*words)
        assert status == 3 and "another program uses it" in err
    other.close(leave=True)


def test_control_line_is_held(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """A control line falls with the program, so it is held as long as asked."""
    path = tmp_path / "station.toml"
    path.write_text('[relay]\nkind = "line"\nport = "loop://"\nsense_line = "cts"\n')
    assert main(["relay", "run", "--yes", "--hold", "0.01", "--station", str(path)]) == 0
    out, err = capsys.readouterr()
    assert "run: reads back as run" in out and "is held for 0.01 s" in err
    path.write_text('[relay]\nkind = "line"\nport = "loop://"\n')
    assert main(["relay", "state", "--station", str(path)]) == 1
    assert "cannot be read without switching" in capsys.readouterr().err


@pytest.mark.parametrize(
    ("content", "words", "status", "says"),
    [
        ("", ("state",), 2, "no relay is configured"),
        ('[relay]\nkind = "line"\nport = "/dev/nowhere"\n', ("state",), 3, "cannot be opened"),
        ('[relay]\nkind = "line"\nport = "loop://"\n', ("test", "--yes", "--cycles", "0"), 2, "--cycles 0"),
        ('[relay]\nkind = "line"\nport = "loop://"\n', ("run", "--yes", "--hold", "-1"), 2, "--hold -1"),
        ('[relay]\nkind = "line"\nport = "loop://"\n', ("run", "--yes", "--hold", "nan"), 2, "--hold nan"),
    ],
)
def test_mistakes_are_one_line(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], content: str, words: tuple[str, ...], status: int, says: str
) -> None:
    """Usage is exit status 2, a port that is not there 3."""
    (tmp_path / "s.toml").write_text(content)
    assert main(["relay", *words, "--station", str(tmp_path / "s.toml")]) == status
    err = capsys.readouterr().err
    assert says in err and err.count("\n") == 1
