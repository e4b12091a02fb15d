"""Modbus RTU frames against published ones and against pymodbus."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st
from pymodbus.framer import FramerRTU
from pymodbus.pdu import DecodePDU
from pymodbus.pdu.bit_message import ReadCoilsRequest, WriteSingleCoilRequest

from edgewatch.wire.relayframes import FrameError, crc16, find_coil, find_written, read_coil, write_coil

PEER = FramerRTU(DecodePDU(False))


@pytest.mark.parametrize(
    "frame",
    [
        # Write coil 173 of unit 17 on and off: MODBUS Application Protocol V1.1b3 (2012), section 6.5, framed for RTU
        # as in the test files of several public Modbus libraries.
        "11 05 00 AC FF 00 4E 8B",
        "11 05 00 AC 00 00 0F 7B",
        # Read coils 20 to 56 of unit 17 and the answer: Modicon Modbus Protocol Reference Guide PI-MBUS-300, read coil
        # status (the body from memory, the CRC computed).
        "11 01 00 13 00 25 0E 84",
        "11 01 05 CD 6B B2 0E 1B 45 E6",
        # Registers, from public device manuals.
        "11 06 00 01 00 03 9A 9B",
        "11 10 00 01 00 02 04 00 0A 01 02 C6 F0",
        "01 03 00 00 00 0A C5 CD",
        # The worked example of the CRC in MODBUS over Serial Line V1.02 (2006), section 6.2.2 (from memory): 0x1241.
        "02 07 41 12",
    ],
)
def test_crc_of_published_frames(frame: str) -> None:
    """The last two bytes are the CRC of the rest, low byte first."""
    content = bytes.fromhex(frame)
    assert crc16(content[:-2]).to_bytes(2, "little") == content[-2:]


def test_crc_check_value() -> None:
    """CRC-16/MODBUS of "123456789" is 0x4B37 (catalogue of parametrised CRC algorithms, G. Cook)."""
    assert crc16(b"123456789") == 0x4B37


@pytest.mark.parametrize(
    ("unit", "coil", "on", "frame"),
    [
        (17, 0xAC, True, "11 05 00 AC FF 00 4E 8B"),
        (17, 0xAC, False, "11 05 00 AC 00 00 0F 7B"),
        (1, 0, True, "01 05 00 00 FF 00 8C 3A"),
        (1, 0, False, "01 05 00 00 00 00 CD CA"),
        (1, 1, True, "01 05 00 01 FF 00 DD FA"),
        (1, 1, False, "01 05 00 01 00 00 9C 0A"),
    ],
)
def test_published_requests(unit: int, coil: int, on: bool, frame: str) -> None:
    """Relay boards' manuals list these; a unit that obeys echoes them."""
    request = write_coil(unit, coil, on)
    assert request == bytes.fromhex(frame)
    assert find_written(request, bytes.fromhex(frame)) is True


@pytest.mark.parametrize(
    ("frame", "says"),
    [
        ("11 85 01 82 95", "illegal function"),
        ("11 85 02 C2 94", "illegal data address"),
        ("11 85 03 03 54", "illegal data value"),
        ("11 85 04 42 96", "server device failure"),
    ],
)
def test_published_exceptions(frame: str, says: str) -> None:
    """Exceptions 01 to 04 to function 05 (application protocol, section 7)."""
    with pytest.raises(FrameError, match=says):
        find_written(write_coil(17, 0xAC, True), bytes.fromhex(frame))


def test_published_read() -> None:
    """One coil of unit 1 read as off: 01 01 01 00 51 88."""
    assert find_coil(read_coil(1, 0), bytes.fromhex("01 01 01 00 51 88")) is False


@given(unit=st.integers(1, 247), coil=st.integers(0, 0xFFFF), on=st.booleans())
def test_requests_equal_those_of_pymodbus(unit: int, coil: int, on: bool) -> None:
    """pymodbus, an independent implementation, builds the same bytes."""
    write = WriteSingleCoilRequest(address=coil, bits=[on], dev_id=unit)
    assert PEER.buildFrame(write) == write_coil(unit, coil, on)
    assert PEER.buildFrame(ReadCoilsRequest(address=coil, count=1, dev_id=unit)) == read_coil(unit, coil)
