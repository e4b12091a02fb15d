"""Relay frames: any cut and any noise of the bytes gives the same answer."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from edgewatch.wire.relayframes import (
    BoardFrames,
    FrameError,
    crc16,
    find_coil,
    find_written,
    has_answer,
    is_energised,
    is_stopped,
    read_coil,
    silence_s,
    write_coil,
)

units = st.integers(1, 247)
coils = st.integers(0, 0xFFFF)


def sealed(*body: int) -> bytes:
    """A frame: its body and CRC."""
    return bytes(body) + crc16(bytes(body)).to_bytes(2, "little")


@pytest.mark.parametrize(
    ("stop", "energise_to", "energised"),
    [(True, "run", False), (False, "run", True), (True, "stop", True), (False, "stop", False)],
)
def test_wiring_maps_both_ways(stop: bool, energise_to: str, energised: bool) -> None:
    """With energise-to-run a dead relay stops the line; the read-back is the inverse."""
    assert is_energised(stop, energise_to) is energised
    assert is_stopped(energised, energise_to) is stop


def test_unknown_wiring_is_refused() -> None:
    """A wiring of another name is a mistake of ours."""
    with pytest.raises(ValueError, match="energise_to"):
        is_energised(True, "go")


def test_board_frames_of_each_level() -> None:
    """On and off have their own frames and answers; without different frames there is no relay."""
    frames = BoardFrames(on_frame=b"\x01", off_frame=b"\x00", on_answer=b"on", off_answer=b"off")
    assert (frames.frame(True), frames.answer(True)) == (b"\x01", b"on")
    assert (frames.frame(False), frames.answer(False)) == (b"\x00", b"off")
    for on, off in ((b"", b"\x00"), (b"\x01", b""), (b"\x01", b"\x01")):
        with pytest.raises(ValueError, match="two different frames"):
            BoardFrames(on_frame=on, off_frame=off)


@given(expected=st.binary(max_size=12), before=st.binary(max_size=12), after=st.binary(max_size=4))
def test_answer_is_found_whole_or_not_yet(expected: bytes, before: bytes, after: bytes) -> None:
    """Each prefix that lacks the end of the answer asks for more, unless the answer stands elsewhere in it."""
    received = before + expected + after
    assert has_answer(received, expected)
    for end in range(len(received)):
        assert has_answer(received[:end], expected) == any(
            received[begin : begin + len(expected)] == expected for begin in range(end - len(expected) + 1)
        )


@given(unit=units, coil=coils, on=st.booleans(), noise=st.binary(max_size=20))
def test_written_coil_is_found_after_any_noise(unit: int, coil: int, on: bool, noise: bytes) -> None:
    """The echo counts wherever it stands; until its last byte has come more is needed."""
    request = write_coil(unit, coil, on)
    for end in range(len(request)):
        assert find_written(request, request[:end]) is None
    assert find_written(request, noise + request) is True


@given(unit=units, coil=coils, level=st.booleans(), padding=st.integers(0, 127), noise=st.binary(max_size=8))
def test_coil_is_read_after_any_noise(unit: int, coil: int, level: bool, padding: int, noise: bytes) -> None:
    """The first bit counts, the rest of the byte does not (a lax unit fills it); noise in front does no harm."""
    request = read_coil(unit, coil)
    answer = sealed(unit, 1, 1, padding << 1 | int(level))
    for end in range(len(answer)):
        assert find_coil(request, answer[:end]) is None
    assert find_coil(request, answer) is level
    found = find_coil(request, noise + answer)
    assert found is level or find_coil(request, noise + answer[:-1]) is not None  # the noise itself was an answer


@given(unit=units, coil=coils, code=st.integers(1, 255))
def test_refusal_is_named(unit: int, coil: int, code: int) -> None:
    """An exception of the unit raises with its number, to either request."""
    for request, find in ((write_coil(unit, coil, True), find_written), (read_coil(unit, coil), find_coil)):
        refusal = sealed(unit, request[1] | 0x80, code)
        assert find(request, refusal[:-1]) is None
        with pytest.raises(FrameError, match=f"unit {unit} refuses: exception {code}, "):
            find(request, refusal)


@given(received=st.binary(max_size=300), unit=units, coil=coils)
def test_rubbish_is_never_an_answer_nor_a_fault(received: bytes, unit: int, coil: int) -> None:
    """Bytes without a valid CRC give ``None``; nothing but ``FrameError`` is ever raised."""
    try:
        written = find_written(write_coil(unit, coil, True), received)
        level = find_coil(read_coil(unit, coil), received)
    except FrameError:
        assert any(sealed(unit, function, code) in received for function in (0x81, 0x85) for code in range(256))
    else:
        assert written is None or write_coil(unit, coil, True) in received
        assert level is None or any(sealed(unit, 1, 1, byte) in received for byte in range(256))


@given(unit=units, coil=coils, bit=st.integers(0, 63))
def test_one_flipped_bit_is_no_echo(unit: int, coil: int, bit: int) -> None:
    """An echo with any one bit wrong confirms nothing."""
    request = write_coil(unit, coil, True)
    mangled = (int.from_bytes(request, "big") ^ 1 << bit).to_bytes(8, "big")
    assert find_written(request, mangled) is None


@pytest.mark.parametrize(("unit", "coil"), [(0, 0), (248, 0), (-1, 0), (1, -1), (1, 0x10000)])
def test_addresses_out_of_range_are_refused(unit: int, coil: int) -> None:
    """A broadcast, a reserved unit and a coil beyond 16 bits are refused."""
    with pytest.raises(ValueError, match=r"unit|coil"):
        write_coil(unit, coil, True)


def test_silence_between_frames() -> None:
    """Three and a half characters of eleven bits, fixed above 19200 bits a second."""
    assert silence_s(9600) == pytest.approx(0.0040104, abs=1e-7)
    assert silence_s(19200) == pytest.approx(0.0020052, abs=1e-7)
    assert silence_s(115200) == 0.00175
    with pytest.raises(ValueError, match="baud"):
        silence_s(0)
