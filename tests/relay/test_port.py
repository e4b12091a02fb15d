"""The three kinds of relay over real ports: pty pairs, a socket, and pyserial's loop."""

from __future__ import annotations

import asyncio
import dataclasses
import os
import select
import signal
import subprocess
import sys
import threading
import time
from collections.abc import Iterator
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from pymodbus.server import ModbusSerialServer
from pymodbus.simulator import DataType, SimData, SimDevice

from edgewatch.errors import DeviceError, SettingsError
from edgewatch.relay.port import CoilRelay, FramesRelay, LineRelay, NoRelay, open_relay
from edgewatch.settings import RelaySettings
from edgewatch.wire.relayframes import crc16, read_coil, write_coil
from tests.relay.boards import Answer, Board, LineServer, board

ON, OFF = bytes.fromhex("A0 01 01 A2"), bytes.fromhex("A0 01 00 A1")
ON_ANSWER, OFF_ANSWER = b"relay 1 on\r\n", b"relay 1 off\r\n"
FRAMES = RelaySettings(
    kind="frames", on_frame=ON, off_frame=OFF, on_answer=ON_ANSWER, off_answer=OFF_ANSWER, answer_s=0.2
)


def prompt(request: bytes) -> list[tuple[float, bytes]]:
    """A board that answers at once."""
    return [(0.0, ON_ANSWER if request == ON else OFF_ANSWER)]


def to_board(made: Board, **changes: object) -> RelaySettings:
    """Settings for ``made``."""
    return dataclasses.replace(FRAMES, port=made.port, **changes)  # type: ignore[arg-type]


@pytest.fixture
def server() -> Iterator[LineServer]:
    """A port with control lines."""
    made = LineServer()
    yield made
    made.close()


@pytest.mark.parametrize(("energise_to", "stopped_level"), [("run", False), ("stop", True)])
def test_frames_switch_a_board_both_ways(energise_to: str, stopped_level: bool) -> None:
    """Stop and run reach the board as the wiring asks; a repeat does no harm; the answer is the read-back."""
    with board({ON: True, OFF: False}, prompt) as made:
        relay = open_relay(to_board(made, energise_to=energise_to))
        assert isinstance(relay, FramesRelay)
        assert relay.read_back() is None  # nothing was asked of it yet
        for stop in (False, True, True, False):
            relay.apply(stop)
            assert made.energised == (stopped_level if stop else not stopped_level)
            assert relay.read_back() is stop
        relay.close(leave=True)


@pytest.mark.parametrize(
    ("answer", "works"),
    [
        (lambda request: [(0.0, part) for part in (b"\x00", *(bytes((b,)) for b in prompt(request)[0][1]))], True),
        (lambda request: [(0.05, prompt(request)[0][1][:4]), (0.05, prompt(request)[0][1][4:])], True),
        (lambda request: [(0.0, OFF_ANSWER + ON_ANSWER)], True),  # a late answer in front of the right one
        (lambda request: [(0.0, b"relay 1 om\r\n")], False),
        (lambda request: [(0.0, prompt(request)[0][1][:-1])], False),
        (lambda request: [], False),
        (lambda request: [(0.0, bytes(3000)), (0.0, bytes(3000))], False),
    ],
    ids=["bytewise", "split", "late before right", "mangled", "cut", "silent", "babbling"],
)
def test_odd_answers(answer: Answer, works: bool) -> None:
    """Split and late answers are understood; mangled, cut, missing and endless ones are said in one line."""
    with board({ON: True, OFF: False}, answer) as made:
        relay = open_relay(to_board(made))
        if works:
            relay.apply(False)
            assert relay.read_back() is False
        else:
            with pytest.raises(DeviceError, match=r"answers? .*to A0 01 01 A2") as caught:
                relay.apply(False)
            assert "\n" not in str(caught.value)
            assert relay.read_back() is None
        relay.close(leave=True)


def test_one_mangled_answer_is_asked_again() -> None:
    """Noise on one answer is no fault."""
    answers = iter([b"\xff\xff", ON_ANSWER])
    with board({ON: True, OFF: False}, lambda request: [(0.0, next(answers))]) as made:
        relay = open_relay(to_board(made))
        relay.apply(False)
        assert made.requests == [ON, ON]
        relay.close(leave=True)


def test_answer_that_comes_too_late_confirms_nothing() -> None:
    """An answer to *on* that comes after its time does not confirm the *off* that follows."""
    with board({ON: True, OFF: False}, lambda request: [(0.0, ON_ANSWER)]) as made:
        relay = open_relay(to_board(made))
        with pytest.raises(DeviceError, match=r"answers .* to A0 01 00 A1"):
            relay.apply(True)
        relay.close(leave=True)


def test_board_without_answers() -> None:
    """Where no answer is configured the frame is sent, and nothing can be read back."""
    with board({ON: True, OFF: False}, lambda request: []) as made:
        relay = open_relay(to_board(made, on_answer=b"", off_answer=b""))
        relay.apply(False)
        assert relay.read_back() is None
        relay.close(leave=True)
        wait_for(lambda: made.energised)


def wait_for(condition: object) -> None:
    """Wait until ``condition()`` holds; fail after five seconds."""
    end_s = time.monotonic() + 5.0
    while not condition():  # type: ignore[operator]
        assert time.monotonic() < end_s, "never happened"
        time.sleep(0.002)  # what is waited for happens in another thread


@pytest.mark.parametrize(
    ("energise_to", "leave", "energised_after"), [("run", False, False), ("run", True, True), ("stop", False, True)]
)
def test_close_falls_back_to_the_safe_side(energise_to: str, leave: bool, energised_after: bool) -> None:
    """At the end an energise-to-run relay is released (the line stops); an energise-to-stop relay is left alone."""
    with board({ON: True, OFF: False}, prompt) as made:
        relay = open_relay(to_board(made, energise_to=energise_to))
        relay.apply(energise_to == "stop")
        assert made.energised
        relay.close(leave=leave)
        assert made.energised == energised_after


def test_pulled_board_is_a_device_error() -> None:
    """A board that is unplugged gives ``DeviceError`` on every use, and closing it raises nothing."""
    made = Board({ON: True, OFF: False}, prompt)
    relay = open_relay(to_board(made))
    relay.apply(False)
    made.pull()
    for stop in (True, False):
        with pytest.raises(DeviceError, match=made.port):
            relay.apply(stop)
    assert relay.read_back() is None  # a level that was never confirmed cannot be read back
    relay.close()


def test_port_in_use_is_refused() -> None:
    """Two programs cannot switch one relay."""
    with board({ON: True, OFF: False}, prompt) as made:
        relay = open_relay(to_board(made))
        with pytest.raises(DeviceError, match="another program uses it"):
            open_relay(to_board(made))
        relay.close(leave=True)


def test_ports_that_are_not_there(tmp_path: Path) -> None:
    """A missing device is a ``DeviceError``, a URL of no known kind the operator's mistake."""
    with pytest.raises(DeviceError, match="cannot be opened"):
        open_relay(dataclasses.replace(FRAMES, port=str(tmp_path / "ttyUSB0")))
    (tmp_path / "file").write_text("")
    with pytest.raises(DeviceError, match="cannot be opened"):
        open_relay(dataclasses.replace(FRAMES, port=str(tmp_path / "file")))
    with pytest.raises(SettingsError, match=r"relay\.port = 'foo://bar'"):
        open_relay(dataclasses.replace(FRAMES, port="foo://bar"))
    with pytest.raises(SettingsError, match="no control lines"):
        open_relay(RelaySettings(kind="line", port="socket://127.0.0.1:1"))


@pytest.mark.parametrize("control_line", ["rts", "dtr"])
@pytest.mark.parametrize("energise_to", ["run", "stop"])
def test_control_line_over_the_loop(control_line: str, energise_to: str) -> None:
    """On pyserial's loop RTS comes back as CTS and DTR as DSR: the level is read back through the sense line."""
    sense = {"rts": "cts", "dtr": "dsr"}[control_line]
    relay = open_relay(
        RelaySettings(kind="line", port="loop://", control_line=control_line, sense_line=sense, energise_to=energise_to)
    )
    assert isinstance(relay, LineRelay)
    for stop in (False, True, True, False):
        relay.apply(stop)
        assert relay.read_back() is stop
    relay.close()


def test_line_without_sense_on_a_url_cannot_be_read_back() -> None:
    """Where neither a contact nor a driver can be asked, the read-back is ``None`` rather than a guess."""
    relay = open_relay(RelaySettings(kind="line", port="loop://"))
    relay.apply(True)
    assert relay.read_back() is None
    relay.close()


def test_contact_that_does_not_follow_is_seen() -> None:
    """A relay whose contact stays open (here: the wrong wire) reads back as the contact says."""
    relay = open_relay(RelaySettings(kind="line", port="loop://", control_line="dtr", sense_line="cts", answer_s=0.05))
    relay.apply(False)
    assert relay.read_back() is True
    relay.close()


@pytest.mark.filterwarnings("ignore:set(Daemon|Name):DeprecationWarning")  # pyserial 3.5's own
def test_control_line_over_a_socket(server: LineServer) -> None:
    """RTS of a real RFC 2217 port follows, starts released, and is released again at the end."""
    relay = open_relay(RelaySettings(kind="line", port=server.url, sense_line="cts", answer_s=2.0))
    assert server.serial.rts is False
    for stop in (False, True, False):
        relay.apply(stop)
        assert server.serial.rts is not stop
        assert relay.read_back() is stop
    relay.close()
    wait_for(lambda: server.serial.rts is False)


@pytest.mark.parametrize("death", [signal.SIGKILL, signal.SIGTERM])
def test_line_stops_when_the_process_dies(server: LineServer, death: signal.Signals) -> None:
    """Energised to run, and the process is killed outright: nobody holds the port any more, so the line stops."""
    program = (
        "import sys, time\nfrom edgewatch.relay.port import open_relay\nfrom edgewatch.settings import RelaySettings\n"
        "relay = open_relay(RelaySettings(kind='line', port=sys.argv[1]))\nrelay.apply(False)\ntime.sleep(600)\n"
    )
    with subprocess.Popen([sys.executable, "-W", "ignore", "-c", program, server.url]) as station:
        wait_for(lambda: server.serial.rts)
        station.send_signal(death)
        wait_for(lambda: not server.serial.rts)


def test_pty_has_no_control_lines() -> None:
    """Where the driver knows no control lines, that is said instead of passing for a switched relay."""
    leader, follower = os.openpty()
    relay = open_relay(RelaySettings(kind="line", port=os.ttyname(follower)))
    with pytest.raises(DeviceError, match="cannot switch RTS"):
        relay.apply(False)
    with pytest.raises(DeviceError, match="cannot read RTS"):
        relay.read_back()
    relay.close()
    os.close(leader)
    os.close(follower)


def modbus_settings(port: str, **changes: object) -> RelaySettings:
    """A coil at unit 17, address 172."""
    plain = RelaySettings(kind="modbus", port=port, unit=17, coil=172, baud=19200, answer_s=0.3)
    return dataclasses.replace(plain, **changes)  # type: ignore[arg-type]


def test_coil_of_a_board_that_is_refused_late_or_mangled() -> None:
    """A coil follows, reads back, and exceptions, mangled and foreign answers are told apart."""
    on, off, ask = write_coil(17, 172, True), write_coil(17, 172, False), read_coil(17, 172)
    state = {"mode": "good"}

    def sealed(body: bytes) -> bytes:
        return body + crc16(body).to_bytes(2, "little")

    def answer(request: bytes) -> list[tuple[float, bytes]]:
        good = request if request != ask else sealed(bytes((17, 1, 1, int(state["coil"] == "on"))))
        if request != ask:
            state["coil"] = "on" if request == on else "off"
        mangled = bytearray(good)
        mangled[-1] ^= 1
        return {
            "good": [(0.0, good)],
            "split": [(0.0, good[:3]), (0.05, good[3:])],
            "noise before": [(0.0, b"\x00\xff" + good)],
            "refuses": [(0.0, sealed(bytes((17, request[1] | 0x80, 2))))],
            "mangled": [(0.0, bytes(mangled))],
            "other unit": [(0.0, sealed(bytes((18,)) + good[1:-2]))],
        }[state["mode"]]

    with board({on: True, off: False, ask: False}, answer) as made:
        relay = open_relay(modbus_settings(made.port))
        assert isinstance(relay, CoilRelay)
        for mode in ("good", "split", "noise before"):
            state["mode"] = mode
            for stop in (False, True):
                relay.apply(stop)
                assert relay.read_back() is stop
        state["mode"] = "refuses"
        with pytest.raises(DeviceError, match="unit 17 refuses: exception 2, illegal data address"):
            relay.apply(False)
        for state["mode"] in ("mangled", "other unit"):
            with pytest.raises(DeviceError, match=r"answers .* to 11 05 00 AC"):
                relay.apply(False)
            with pytest.raises(DeviceError, match=r"answers .* to 11 01 00 AC"):
                relay.read_back()
        relay.close(leave=True)


@given(noise=st.binary(max_size=40), cut=st.integers(0, 60))
@settings(max_examples=40, deadline=None)
def test_any_bytes_from_the_board_confirm_only_what_they_hold(noise: bytes, cut: int) -> None:
    """Whatever the board sends, the relay counts as switched only if the right answer is in it; nothing else raises."""
    said = (noise + ON_ANSWER)[:cut]
    with board({ON: True, OFF: False}, lambda request: [(0.0, said)] if said else []) as made:
        relay = open_relay(to_board(made, answer_s=0.02))
        try:
            relay.apply(False)
        except DeviceError:
            assert ON_ANSWER not in said
        else:
            assert ON_ANSWER in said
        relay.close(leave=True)


class PymodbusBoard:
    """pymodbus as the board: coils 0 to 255 of unit 17 on one end of a pty pair, and what was written to them."""

    def __init__(self, port: str) -> None:
        self.written: list[tuple[int, bool]] = []
        self._port = port
        self._ready = threading.Event()
        self._thread = threading.Thread(target=lambda: asyncio.run(self._serve()))
        self._thread.start()
        assert self._ready.wait(10.0)

    async def _serve(self) -> None:
        async def note(
            function: int, start: int, address: int, count: int, present: list[int], wanted: list[bool] | None
        ) -> None:
            if wanted is not None:
                self.written.append((address, bool(wanted[0])))

        coils = [SimData(0, count=16, values=0, datatype=DataType.REGISTERS)]
        device = SimDevice(id=17, simdata=coils, use_bit_addressing=True, action=note)
        server = ModbusSerialServer(device, port=self._port, baudrate=19200)
        await server.serve_forever(background=True)
        self._loop, self._done = asyncio.get_running_loop(), asyncio.Event()
        self._ready.set()
        await self._done.wait()
        await server.shutdown()

    def close(self) -> None:
        """Stop serving."""
        self._loop.call_soon_threadsafe(self._done.set)
        self._thread.join()


def test_pymodbus_as_the_board() -> None:
    """An independent implementation of the standard understands our requests, and we its answers and refusals."""
    ours, theirs = os.openpty(), os.openpty()
    wire = Wire(ours[0], theirs[0])
    peer = PymodbusBoard(os.ttyname(theirs[1]))
    relay = open_relay(modbus_settings(os.ttyname(ours[1]), answer_s=2.0))
    try:
        for stop in (False, True, False):
            relay.apply(stop)
            assert peer.written.pop() == (172, not stop)
            assert relay.read_back() is stop
        relay.close(leave=True)
        relay = open_relay(modbus_settings(os.ttyname(ours[1]), coil=9999, answer_s=2.0))
        with pytest.raises(DeviceError, match="exception 2, illegal data address"):
            relay.apply(False)
    finally:
        relay.close(leave=True)
        peer.close()
        wire.close()
        for fd in (ours[1], theirs[1]):
            os.close(fd)


class Wire:
    """Copies bytes between the leaders of two ptys, so that two programs talk as over a null-modem cable."""

    def __init__(self, one: int, two: int) -> None:
        self._ends, self._stop = (one, two), os.pipe()
        self._thread = threading.Thread(target=self._run)
        self._thread.start()

    def _run(self) -> None:
        one, two = self._ends
        while True:
            ready, _, _ = select.select([one, two, self._stop[0]], [], [])
            if self._stop[0] in ready:
                return
            for fd in ready:
                os.write(two if fd == one else one, os.read(fd, 256))

    def close(self) -> None:
        """Cut the wire."""
        os.write(self._stop[1], b"x")
        self._thread.join()
        for fd in (*self._ends, *self._stop):
            os.close(fd)


def test_no_relay() -> None:
    """Where no relay is wired every level is fine and nothing is read back."""
    relay = open_relay(RelaySettings())
    assert isinstance(relay, NoRelay)
    relay.apply(True)
    assert relay.read_back() is None
    relay.close()
