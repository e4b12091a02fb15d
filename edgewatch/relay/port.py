"""Relays: the process stop on a serial port. Never a safety function.

Ports are pyserial's: a device path or a URL, so ``loop://``, ``rfc2217://`` and a pty serve as well as a board.

When the station ends, a relay that is energised to run the line is released: the line stops. One that is energised to
stop the line is left as it is: releasing it would undo a stop, and such wiring has no safe state to fall back to. When
the process is killed, the kernel drops RTS and DTR at the last close (HUPCL, termios(3)); a byte-frame or Modbus board
keeps its level, unless it has a communication watchdog of its own: set that where there is one.
"""

from __future__ import annotations

import contextlib
import fcntl
import struct
import termios
import time
from collections.abc import Callable, Iterator
from typing import Any, Protocol, TypeVar

import serial

from edgewatch.errors import DeviceError, SettingsError
from edgewatch.settings import RelaySettings
from edgewatch.wire.relayframes import (
    BoardFrames,
    FrameError,
    find_coil,
    find_written,
    has_answer,
    is_energised,
    is_stopped,
    read_coil,
    silence_s,
    write_coil,
)

_SLICE_S = 0.02
"""Longest single wait for a byte (s); pyserial sets the port anew when a time-out changes, so it never does."""
_MOST_ANSWER = 4096
"""A board that babbles more than this (bytes) within one answer time is not answering."""

_ATTEMPTS = 2
"""One mangled answer is noise on the line; two in a row are a fault."""

_PARITIES = {"none": serial.PARITY_NONE, "even": serial.PARITY_EVEN, "odd": serial.PARITY_ODD}

T = TypeVar("T")


class Relay(Protocol):
    """One relay. One thread uses it."""

    def apply(self, stop: bool) -> None:
        """Bring the line to this level; a repeat does no harm. Raises ``DeviceError`` if it is not confirmed."""

    def read_back(self) -> bool | None:
        """Whether the line is stopped, as the board says; ``None`` if this kind cannot tell.

        Raises ``DeviceError``.
        """

    def close(self, *, leave: bool = False) -> None:
        """Let go of the port, with the line stopped where the wiring allows, or left as it is."""


def open_relay(settings: RelaySettings) -> Relay:
    """Open the relay that is configured. Raises ``SettingsError``, ``DeviceError``."""
    if settings.kind == "none":
        return NoRelay()
    kinds: dict[str, Callable[[RelaySettings], Relay]] = {"line": LineRelay, "frames": FramesRelay, "modbus": CoilRelay}
    return kinds[settings.kind](settings)


class NoRelay:
    """No relay is wired: every level is fine and none can be read back."""

    def apply(self, stop: bool) -> None:
        """Nothing is to be done."""

    def read_back(self) -> bool | None:
        """Nobody knows."""
        return None

    def close(self, *, leave: bool = False) -> None:
        """Nothing is open."""


class LineRelay:
    """A relay on a serial control line, RTS or DTR; its spare contact may be wired back to CTS, DSR or DCD."""

    def __init__(self, settings: RelaySettings) -> None:
        """Open the port with both lines released. Raises ``SettingsError``, ``DeviceError``."""
        if settings.port.startswith("socket://"):  # pyserial would accept the level and send nothing
            raise SettingsError(f"relay.port = {settings.port!r}: a raw socket has no control lines; use rfc2217://")
        self._settings = settings
        self._port = _Port(settings)
        self._energised = False

    def apply(self, stop: bool) -> None:
        """Set the control line."""
        self._energised = is_energised(stop, self._settings.energise_to)
        self._port.set_line(self._settings.control_line, self._energised)

    def read_back(self) -> bool | None:
        """Whether the line is stopped: by the relay's own contact where it is wired, else by what the driver holds.

        A contact is given ``answer_s`` to follow the coil.
        """
        settings = self._settings
        if settings.sense_line == "none":
            energised = self._port.driven(settings.control_line)
            return None if energised is None else is_stopped(energised, settings.energise_to)
        give_up_s = time.monotonic() + settings.answer_s
        while (closed := self._port.sensed(settings.sense_line)) != self._energised and time.monotonic() < give_up_s:
            time.sleep(_SLICE_S)  # control lines can only be asked: there is nothing to wait on that every driver has
        return is_stopped(closed, settings.energise_to)

    def close(self, *, leave: bool = False) -> None:
        """See ``Relay.close``; without this process the kernel releases the line whatever ``leave`` says."""
        _say_farewell(self, self._settings, leave)
        self._port.close()


class FramesRelay:
    """A board that is switched by byte frames, and may answer."""

    def __init__(self, settings: RelaySettings) -> None:
        """Open the port; the board keeps its level. Raises ``SettingsError``, ``DeviceError``."""
        self._settings = settings
        self._frames = BoardFrames(
            on_frame=settings.on_frame,
            off_frame=settings.off_frame,
            on_answer=settings.on_answer,
            off_answer=settings.off_answer,
        )
        self._port = _Port(settings)
        self._energised: bool | None = None

    def apply(self, stop: bool) -> None:
        """Send the frame and wait for the answer where one is configured."""
        energise = is_energised(stop, self._settings.energise_to)
        expected = self._frames.answer(energise)
        self._energised = None
        self._port.exchange(self._frames.frame(energise), lambda received: has_answer(received, expected) or None)
        self._energised = energise

    def read_back(self) -> bool | None:
        """Send the last frame again, which changes nothing, and take the answer; ``None`` without an answer to take."""
        energised = self._energised
        if energised is None or not self._frames.answer(energised):
            return None
        stop = is_stopped(energised, self._settings.energise_to)
        self.apply(stop)
        return stop

    def close(self, *, leave: bool = False) -> None:
        """See ``Relay.close``."""
        _say_farewell(self, self._settings, leave)
        self._port.close()


class CoilRelay:
    """A coil of a relay board over Modbus RTU."""

    def __init__(self, settings: RelaySettings) -> None:
        """Open the port; the board keeps its level. Raises ``SettingsError``, ``DeviceError``."""
        self._settings = settings
        self._port = _Port(settings, silence_s=silence_s(settings.baud))

    def apply(self, stop: bool) -> None:
        """Write the coil and wait for the echo."""
        settings = self._settings
        request = write_coil(settings.unit, settings.coil, is_energised(stop, settings.energise_to))
        self._port.exchange(request, lambda received: find_written(request, received))

    def read_back(self) -> bool | None:
        """Read the coil."""
        request = read_coil(self._settings.unit, self._settings.coil)
        energised = self._port.exchange(request, lambda received: find_coil(request, received))
        return is_stopped(energised, self._settings.energise_to)

    def close(self, *, leave: bool = False) -> None:
        """See ``Relay.close``."""
        _say_farewell(self, self._settings, leave)
        self._port.close()


def _say_farewell(relay: Relay, settings: RelaySettings, leave: bool) -> None:
    if not leave and settings.energise_to == "run":
        with contextlib.suppress(DeviceError):  # a port that is gone needs no farewell
            relay.apply(True)


class _Port:
    """An open serial port whose errors are all ``DeviceError``."""

    def __init__(self, settings: RelaySettings, *, silence_s: float = 0.0) -> None:
        """``silence_s``: the line rests this long between an answer and the next request."""
        self._name, self._answer_s, self._silence_s = settings.port, settings.answer_s, silence_s
        self._quiet_since_s = time.monotonic()
        with self._translated("cannot be opened"):
            try:
                port: Any = serial.serial_for_url(settings.port, do_not_open=True)
            except ValueError as error:
                raise SettingsError(
                    f"relay.port = {settings.port!r}: allowed is a serial port or a pyserial URL ({error})"
                ) from error
            port.baudrate, port.parity = settings.baud, _PARITIES[settings.parity]
            port.timeout = _SLICE_S
            port.rts = port.dtr = False  # before opening, so that a line relay stays released
            if isinstance(port, serial.Serial):  # a device; pyserial's URLs know neither
                port.write_timeout = settings.answer_s
                port.exclusive = True  # two programs that switch one relay would fight
            port.open()
        self._port = port

    def exchange(self, request: bytes, find: Callable[[bytes], T | None]) -> T:
        """Send ``request`` and read until ``find`` finds an answer; once more if it was lost or mangled.

        Raises ``DeviceError`` if no answer comes in time, or the board refuses.
        """
        received = b""
        with self._translated("does not answer"):
            for _ in range(_ATTEMPTS):
                self._rest()
                self._port.reset_input_buffer()  # late answers to earlier requests
                self._port.write(request)
                received, answer = self._listen(find)
                self._quiet_since_s = time.monotonic()
                if answer is not None:
                    return answer
        said = f"answers {received[-16:].hex(' ').upper()}" if received else "does not answer"
        raise DeviceError(f"relay {self._name}: {said} to {request.hex(' ').upper()}")

    def _listen(self, find: Callable[[bytes], T | None]) -> tuple[bytes, T | None]:
        received = b""
        give_up_s = time.monotonic() + self._answer_s
        while True:
            try:
                answer = find(received)
            except FrameError as error:
                raise DeviceError(f"relay {self._name}: {error}") from error
            if answer is not None or time.monotonic() >= give_up_s or len(received) > _MOST_ANSWER:
                return received, answer
            received += self._port.read(max(1, self._port.in_waiting))

    def set_line(self, line: str, level: bool) -> None:
        """Set RTS or DTR."""
        with self._translated(f"cannot switch {line.upper()}"):
            setattr(self._port, line, level)

    def driven(self, line: str) -> bool | None:
        """Level of RTS or DTR as the driver holds it; ``None`` where there is no driver to ask (URLs)."""
        if not isinstance(self._port, serial.Serial):
            return None
        with self._translated(f"cannot read {line.upper()}"):
            word = fcntl.ioctl(self._port.fileno(), termios.TIOCMGET, struct.pack("I", 0))
        return bool(struct.unpack("I", word)[0] & (termios.TIOCM_RTS if line == "rts" else termios.TIOCM_DTR))

    def sensed(self, line: str) -> bool:
        """Level of CTS, DSR or DCD."""
        with self._translated(f"cannot read {line.upper()}"):
            return bool(getattr(self._port, "cd" if line == "dcd" else line))

    def close(self) -> None:
        """Let go of the port; one that is gone raises nothing."""
        with contextlib.suppress(OSError, termios.error):
            self._port.close()

    def _rest(self) -> None:
        rest_s = self._quiet_since_s + self._silence_s - time.monotonic()
        if rest_s > 0:
            time.sleep(rest_s)

    @contextlib.contextmanager
    def _translated(self, what: str) -> Iterator[None]:
        try:
            yield
        except (OSError, termios.error) as error:  # serial.SerialException is an OSError
            text = " ".join(str(error).split())
            if "exclusively lock" in text:
                text = "another program uses it"
            raise DeviceError(f"relay {self._name}: {what}: {text}") from error
