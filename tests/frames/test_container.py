"""Lengths that video files state of themselves, on files that ffmpeg wrote."""

from __future__ import annotations

import struct
import subprocess
import zlib
from pathlib import Path

import cv2
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from edgewatch.frames.container import find_jpeg_damage, find_png_damage, missing_bytes
from tests.clips import FFV1_GREY, noise_pictures, write_clip

KINDS = {
    "a.mkv": FFV1_GREY,
    "a.webm": ("-c:v", "libvpx-vp9", "-lossless", "1"),
    "a.avi": FFV1_GREY,
    "a.mp4": ("-c:v", "libx264", "-qp", "0"),
    "f.mp4": ("-c:v", "libx264", "-qp", "0", "-movflags", "faststart"),
    "g.mp4": ("-c:v", "libx264", "-g", "5", "-movflags", "frag_keyframe+empty_moov"),
    "a.mov": ("-c:v", "png"),
}


@pytest.mark.parametrize("name", KINDS)
def test_whole_files_miss_nothing_and_cut_ones_what_was_cut(tmp_path: Path, name: str) -> None:
    """Each container: whole, with junk behind, and cut by 1 byte and by a third."""
    path = write_clip(tmp_path / name, noise_pictures(12, height=32, width=32), options=KINDS[name])
    content = path.read_bytes()
    assert missing_bytes(path) == 0
    path.write_bytes(content + b"junk")
    assert missing_bytes(path) == 0
    for cut in (1, len(content) // 3):
        path.write_bytes(content[:-cut])
        assert 0 < missing_bytes(path) <= cut
        # What boxes would have followed the one that was cut is not known; the others state their whole length.
        assert missing_bytes(path) == cut or path.suffix in (".mp4", ".mov")


def test_unfinished_recording_states_no_length(tmp_path: Path) -> None:
    """Matroska written to a pipe cannot be completed with its length: wherever it ends it counts as whole."""
    whole = write_clip(tmp_path / "a.mkv", noise_pictures(12))
    command = ["ffmpeg", "-loglevel", "error", "-i", str(whole), "-c", "copy", "-f", "matroska", "-"]
    streamed = subprocess.run(command, check=True, capture_output=True).stdout
    (tmp_path / "b.mkv").write_bytes(streamed[: len(streamed) // 2])
    assert missing_bytes(tmp_path / "b.mkv") == 0


@given(
    head=st.sampled_from([b"\x1a\x45\xdf\xa3", b"RIFF\x10\0\0\0AVI ", b"\0\0\0\x10ftyp", b"\0\0\0\x01mdat", b""]),
    rest=st.binary(max_size=64),
)
@settings(suppress_health_check=[HealthCheck.function_scoped_fixture])
def test_any_bytes_give_a_number(tmp_path: Path, head: bytes, rest: bytes) -> None:
    """Whatever stands in a file, the answer is a number of bytes, 0 or more."""
    path = tmp_path / "any"
    path.write_bytes(head + rest)
    assert missing_bytes(path) >= 0


def encoded(suffix: str) -> bytes:
    """A picture of noise as a file."""
    return bytes(cv2.imencode(suffix, noise_pictures(1, height=24, width=32)[0])[1].tobytes())


@given(place=st.integers(8, 800), bit=st.integers(0, 7))
def test_any_flipped_bit_of_a_png_is_found(place: int, bit: int) -> None:
    """Lengths, kinds, contents and check sums are all covered; only the signature is left to who reads it."""
    content = bytearray(encoded(".png"))
    assert find_png_damage(bytes(content)) == ""
    content[place % (len(content) - 8) + 8] ^= 1 << bit
    assert "damaged" in find_png_damage(bytes(content)) or "larger" in find_png_damage(bytes(content))


@given(cut=st.integers(1, 700))
def test_any_cut_of_a_picture_is_found(cut: int) -> None:
    """A PNG or JPEG that lost its end is found; what lies behind its end does no harm."""
    png, jpeg = encoded(".png"), encoded(".jpg")
    assert find_png_damage(png + b"more") == "" == find_jpeg_damage(jpeg + b"more")
    assert find_png_damage(png[:-cut]) if len(png) - cut >= 8 else True
    assert find_jpeg_damage(jpeg[: max(2, len(jpeg) - max(cut, 2))])


def test_other_files_are_not_judged() -> None:
    """What is neither PNG nor JPEG is left to its decoder; a PNG beyond all bounds is refused unread."""
    assert find_png_damage(b"P5 1 1 255 x") == "" == find_jpeg_damage(b"P5 1 1 255 x")
    header = struct.pack(">IIBBBBB", 40_000, 24, 8, 0, 0, 0, 0)
    chunk = struct.pack(">I", len(header)) + b"IHDR" + header + struct.pack(">I", zlib.crc32(b"IHDR" + header))
    assert "larger than" in find_png_damage(encoded(".png")[:8] + chunk + encoded(".png")[33:])
