"""What every relay keeps to: run on each kind, and, marked ``hardware``, on a real port with RTS wired to CTS."""

from __future__ import annotations

import contextlib
import os
import time
from collections.abc import Callable, Iterator
from contextlib import AbstractContextManager

import pytest

from edgewatch.relay.port import open_relay
from edgewatch.settings import RelaySettings
from edgewatch.wire.relayframes import crc16, read_coil, write_coil
from tests.relay.boards import Board, LineServer

Wired = tuple[dict[str, object], Callable[[], bool | None]]
"""Settings that reach the relay, and its level as seen past our code; ``None`` where nobody else can see it."""

ON, OFF, ASK = write_coil(3, 7, True), write_coil(3, 7, False), read_coil(3, 7)


@contextlib.contextmanager
def byte_frames() -> Iterator[Wired]:
    """A board that answers its frames."""
    board = Board({b"\x01on": True, b"\x01off": False}, lambda request: [(0.0, b"ok " + request)])
    settings = {
        "kind": "frames",
        "port": board.port,
        "on_frame": b"\x01on",
        "off_frame": b"\x01off",
        "on_answer": b"ok \x01on",
        "off_answer": b"ok \x01off",
    }
    yield settings, lambda: board.energised
    board.pull()


@contextlib.contextmanager
def coil() -> Iterator[Wired]:
    """A Modbus board."""
    state = {"on": False}

    def answer(request: bytes) -> list[tuple[float, bytes]]:
        if request != ASK:
            state["on"] = request == ON
            return [(0.0, request)]
        body = bytes((3, 1, 1, int(state["on"])))
        return [(0.0, body + crc16(body).to_bytes(2, "little"))]

    board = Board({ON: True, OFF: False, ASK: False}, answer)
    yield {"kind": "modbus", "port": board.port, "baud": 115200, "unit": 3, "coil": 7}, lambda: state["on"]
    board.pull()


@contextlib.contextmanager
def loop() -> Iterator[Wired]:
    """pyserial's loop, RTS wired to CTS."""
    yield {"kind": "line", "port": "loop://", "sense_line": "cts"}, lambda: None


@contextlib.contextmanager
def socket_port() -> Iterator[Wired]:
    """A port behind RFC 2217, RTS wired to CTS."""
    server = LineServer()
    settings = {"kind": "line", "port": server.url, "sense_line": "cts", "answer_s": 2.0}
    yield settings, lambda: bool(server.serial.rts)
    server.close()


@contextlib.contextmanager
def real_port() -> Iterator[Wired]:
    """The port in EDGEWATCH_SERIAL, with a plug that wires RTS to CTS."""
    yield {"kind": "line", "port": os.environ["EDGEWATCH_SERIAL"], "sense_line": "cts"}, lambda: None


KINDS = [
    byte_frames,
    coil,
    loop,
    pytest.param(socket_port, marks=pytest.mark.filterwarnings("ignore:set(Daemon|Name):DeprecationWarning")),
    pytest.param(real_port, marks=pytest.mark.hardware),
]


@pytest.fixture(params=KINDS, ids=lambda kind: getattr(kind, "__name__", ""))
def wired(request: pytest.FixtureRequest) -> Iterator[Wired]:
    """A relay of each kind."""
    made: AbstractContextManager[Wired] = request.param()
    with made as wired:
        yield wired


def settles(level: Callable[[], bool | None], wanted: bool) -> bool:
    """Whether the relay reaches the level; a socket takes its time."""
    end_s = time.monotonic() + 5.0
    while (now := level()) is not None and now != wanted and time.monotonic() < end_s:
        time.sleep(0.002)  # what is waited for happens at the other end of a wire
    return now is None or now == wanted


@pytest.mark.parametrize("energise_to", ["run", "stop"])
def test_levels_follow_and_read_back(wired: Wired, energise_to: str) -> None:
    """Each level reaches the relay as the wiring asks, reads back, and a repeat changes nothing."""
    settings, level = wired
    relay = open_relay(RelaySettings(energise_to=energise_to, **settings))  # type: ignore[arg-type]
    for stop in (True, False, False, True, False):
        relay.apply(stop)
        assert settles(level, stop == (energise_to == "stop"))
        assert relay.read_back() is stop
    relay.close()


def test_released_at_the_end_and_opened_again(wired: Wired) -> None:
    """An energise-to-run relay is released by ``close``; closing twice does no harm; the port can be opened again."""
    settings, level = wired
    for _ in range(2):
        relay = open_relay(RelaySettings(**settings))  # type: ignore[arg-type]
        relay.apply(False)
        assert settles(level, True)
        relay.close()
        relay.close()
        assert settles(level, False)


def test_opening_alone_energises_nothing(wired: Wired) -> None:
    """A relay that is opened and closed without a level stays released."""
    settings, level = wired
    relay = open_relay(RelaySettings(**settings))  # type: ignore[arg-type]
    assert level() in (False, None)
    relay.close(leave=True)
    assert level() in (False, None)
