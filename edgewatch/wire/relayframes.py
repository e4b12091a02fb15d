"""Relay frames: a wanted level <-> bytes, for byte-frame boards and Modbus RTU coils. Core: no port is touched here.

Answers are looked for anywhere in what has come since the request was sent: a late answer to an earlier request, or a
byte of noise, in front of the right answer does no harm. ``None`` means that more bytes are needed.

Modbus: MODBUS Application Protocol Specification V1.1b3 (2012), sections 6.1 (read coils), 6.5 (write single coil) and
7 (exceptions); MODBUS over Serial Line V1.02 (2006), section 2.5.1 (RTU framing) and 6.2.2 (CRC).
"""

from __future__ import annotations

import struct
from dataclasses import dataclass

READ_COILS, WRITE_COIL = 0x01, 0x05
_EXCEPTION = 0x80
_COIL_ON, _COIL_OFF = 0xFF00, 0x0000
"""Section 6.5: any other value is refused by the unit."""

EXCEPTIONS = {
    1: "illegal function",
    2: "illegal data address",
    3: "illegal data value",
    4: "server device failure",
    5: "acknowledge: still working on it",
    6: "server device busy",
    8: "memory parity error",
    10: "gateway path unavailable",
    11: "gateway target device failed to respond",
}
"""Section 7."""

CHARACTER_BITS = 11
"""Start, eight data, parity or second stop, stop (serial line guide, section 2.5.1)."""
_FAST_BAUD, _FAST_SILENCE_S = 19200, 0.00175
"""Above this speed the guide recommends a fixed silence (section 2.5.1.1)."""


class FrameError(ValueError):
    """The unit refused the request; the text says why."""


@dataclass(frozen=True, slots=True, kw_only=True)
class BoardFrames:
    """What a byte-frame board is sent, and what it answers (empty: nothing)."""

    on_frame: bytes
    off_frame: bytes
    on_answer: bytes = b""
    off_answer: bytes = b""

    def __post_init__(self) -> None:
        """Check that the frames can tell on from off."""
        if not self.on_frame or not self.off_frame or self.on_frame == self.off_frame:
            raise ValueError("on_frame and off_frame: two different frames of at least one byte are needed")

    def frame(self, energise: bool) -> bytes:
        """Bytes that bring the relay to this level."""
        return self.on_frame if energise else self.off_frame

    def answer(self, energise: bool) -> bytes:
        """Bytes that the board answers to that."""
        return self.on_answer if energise else self.off_answer


def is_energised(stop: bool, energise_to: str) -> bool:
    """Whether the relay is to be energised so that the line stops or runs.

    ``energise_to="run"``: a dead board, a cut wire or a missing supply stops the line. ``"stop"``: the opposite.
    """
    if energise_to not in ("run", "stop"):
        raise ValueError(f'energise_to = {energise_to!r}: "run" or "stop"')
    return stop == (energise_to == "stop")


def is_stopped(energised: bool, energise_to: str) -> bool:
    """Whether the line is stopped while the relay is at this level: the inverse of ``is_energised``."""
    return is_energised(energised, energise_to)


def has_answer(received: bytes, expected: bytes) -> bool:
    """Whether ``expected`` has come, with anything in front of it; ``False`` means that more bytes are needed."""
    return expected in received


def crc16(data: bytes) -> int:
    """Modbus CRC (serial line guide, section 6.2.2): polynomial 0xA001 (reflected), begun at 0xFFFF.

    It is sent low byte first.
    """
    crc = 0xFFFF
    for byte in data:
        crc ^= byte
        for _ in range(8):
            crc = (crc >> 1) ^ 0xA001 if crc & 1 else crc >> 1
    return crc


def write_coil(unit: int, coil: int, on: bool) -> bytes:
    """Request that sets a coil; a unit that obeys answers with the same bytes. Raises ``ValueError``."""
    return _request(unit, WRITE_COIL, coil, _COIL_ON if on else _COIL_OFF)


def read_coil(unit: int, coil: int) -> bytes:
    """Request that reads one coil. Raises ``ValueError``."""
    return _request(unit, READ_COILS, coil, 1)


def find_written(request: bytes, received: bytes) -> bool | None:
    """Find the answer to ``write_coil`` in ``received``: ``True`` when the unit has obeyed, ``None`` if more is needed.

    Raises ``FrameError`` when the unit refuses.
    """
    if request in received:
        return True
    _look_for_refusal(request, received)
    return None


def find_coil(request: bytes, received: bytes) -> bool | None:
    """Find the answer to ``read_coil`` in ``received``: the coil's level, ``None`` if more is needed.

    Raises ``FrameError`` when the unit refuses.
    """
    head = bytes((request[0], READ_COILS, 1))
    for body in _bodies(received, head, len(head) + 1):
        return bool(body[-1] & 1)
    _look_for_refusal(request, received)
    return None


def silence_s(baud: int) -> float:
    """Silence that parts two RTU frames (s): three and a half characters, or 1.75 ms above 19200 bits a second."""
    if baud <= 0:
        raise ValueError(f"baud = {baud!r}: more than 0")
    return _FAST_SILENCE_S if baud > _FAST_BAUD else 3.5 * CHARACTER_BITS / baud


def _request(unit: int, function: int, address: int, value: int) -> bytes:
    if not 1 <= unit <= 247:
        raise ValueError(f"unit = {unit!r}: 1 to 247; a broadcast is not answered, so it could not be verified")
    if not 0 <= address <= 0xFFFF:
        raise ValueError(f"coil = {address!r}: 0 to 65535")
    return _sealed(struct.pack(">BBHH", unit, function, address, value))


def _sealed(body: bytes) -> bytes:
    return body + struct.pack("<H", crc16(body))


def _bodies(received: bytes, head: bytes, length: int) -> list[bytes]:
    """Every frame body of ``length`` that begins with ``head`` and is followed by its CRC."""
    found = []
    begin = received.find(head)
    while begin >= 0:
        body = received[begin : begin + length]
        if len(body) == length and received[begin : begin + length + 2] == _sealed(body):
            found.append(body)
        begin = received.find(head, begin + 1)
    return found


def _look_for_refusal(request: bytes, received: bytes) -> None:
    head = bytes((request[0], request[1] | _EXCEPTION))
    for body in _bodies(received, head, len(head) + 1):
        code = body[-1]
        raise FrameError(f"unit {request[0]} refuses: exception {code}, {EXCEPTIONS.get(code, 'not in the standard')}")
