"""Relays: the process stop on a serial port. Never a safety function.

Ports are pyserial's: a device path or a URL, so ``loop://``, ``rfc2217://`` and a pty serve as well as a board.

When the station ends, a relay that is energised to run the line is released: the line stops. One that is energised to
stop the line is left as it is: releasing it would undo a stop, and such wiring has no safe state to fall back to. When
the process is killed, the kernel drops RTS and DTR at the last close (HUPCL, termios(3)); a byte-frame or Modbus board
keeps its level, unless it has a communication watchdog of its own: set that where there is one.
"""

from __future__ import annotations

import contextlib
import time
from collections.abc import Callable
from typing import Protocol

from edgewatch.errors import DeviceError, SettingsError
from edgewatch.relay.serialport import SLICE_S, SerialPort
from edgewatch.settings import RelaySettings
from edgewatch.wire.relayframes import (
    BoardFrames,
    find_coil,
    find_written,
    has_answer,
    is_energised,
    is_stopped,
    read_coil,
    silence_s,
    write_coil,
)


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
        self._port = _open_port(settings)
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
            time.sleep(SLICE_S)  # control lines can only be asked: there is nothing to wait on that every driver has
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
        self._port = _open_port(settings)
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
        self._port = _open_port(settings, silence_s=silence_s(settings.baud))

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


def _open_port(settings: RelaySettings, *, silence_s: float = 0.0) -> SerialPort:
    return SerialPort(
        settings.port,
        part="relay",
        baud=settings.baud,
        parity=settings.parity,
        answer_s=settings.answer_s,
        silence_s=silence_s,
    )
