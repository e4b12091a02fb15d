"""An open serial port: requests with answers, control lines, and errors of one family."""

from __future__ import annotations

import contextlib
import fcntl
import struct
import termios
import time
from collections.abc import Callable, Iterator
from typing import Any, TypeVar

import serial

from edgewatch.errors import DeviceError, SettingsError
from edgewatch.wire.relayframes import FrameError

SLICE_S = 0.02
"""Longest single wait for a byte (s); pyserial sets the port anew when a time-out changes, so it never does."""
_MOST_ANSWER = 4096
"""A board that babbles more than this (bytes) within one answer time is not answering."""

_ATTEMPTS = 2
"""One mangled answer is noise on the line; two in a row are a fault."""

_PARITIES = {"none": serial.PARITY_NONE, "even": serial.PARITY_EVEN, "odd": serial.PARITY_ODD}

T = TypeVar("T")


class SerialPort:
    """An open serial port whose errors are all ``DeviceError``."""

    def __init__(
        self,
        name: str,
        *,
        part: str,
        baud: int = 9600,
        parity: str = "none",
        answer_s: float = 0.5,
        silence_s: float = 0.0,
        raised: bool = False,
    ) -> None:
        """Open ``name``, a device or a pyserial URL, with RTS and DTR as ``raised`` says.

        ``part``: the section of the settings, for errors. ``answer_s``: longest wait for an answer. ``silence_s``: the
        line rests this long between an answer and the next request. Raises ``SettingsError``, ``DeviceError``.
        """
        self._name, self._part, self._answer_s, self._silence_s = name, part, answer_s, silence_s
        self._quiet_since_s = time.monotonic()
        with self._translated("cannot be opened"):
            try:
                port: Any = serial.serial_for_url(name, do_not_open=True)
            except ValueError as error:
                raise SettingsError(
                    f"{part}.port = {name!r}: allowed is a serial port or a pyserial URL ({error})"
                ) from error
            port.baudrate, port.parity, port.timeout = baud, _PARITIES[parity], SLICE_S
            port.rts = port.dtr = raised  # before opening, so that a relay on a line stays released
            if isinstance(port, serial.Serial):  # a device; pyserial's URLs know neither
                port.write_timeout = answer_s
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
        raise DeviceError(f"{self._part} {self._name}: {said} to {request.hex(' ').upper()}")

    def _listen(self, find: Callable[[bytes], T | None]) -> tuple[bytes, T | None]:
        received = b""
        give_up_s = time.monotonic() + self._answer_s
        while True:
            try:
                answer = find(received)
            except FrameError as error:
                raise DeviceError(f"{self._part} {self._name}: {error}") from error
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
        """Level of CTS, DSR, DCD or RI."""
        with self._translated(f"cannot read {line.upper()}"):
            return bool(getattr(self._port, "cd" if line == "dcd" else line))

    def close(self) -> None:
        """Let go of the port; one that is gone raises nothing."""
        with contextlib.suppress(OSError, termios.error):
            self._port.close()

    def _rest(self) -> None:
        rest_s = self._quiet_since_s + self._silence_s - time.monotonic()
        if rest_s > 0:
            time.sleep(rest_s)  # Modbus RTU wants silence between frames: time itself is what is waited for

    @contextlib.contextmanager
    def _translated(self, what: str) -> Iterator[None]:
        try:
            yield
        except (OSError, termios.error) as error:  # serial.SerialException is an OSError
            text = " ".join(str(error).split())
            if "exclusively lock" in text:
                text = "another program uses it"
            raise DeviceError(f"{self._part} {self._name}: {what}: {text}") from error
