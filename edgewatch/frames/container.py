"""Whether a file is whole, by what it states of itself.

A video that lost its end must not be taken for a shorter recording. Neither FFmpeg nor OpenCV tells it from a whole
one: both end without an error. The number of frames that OpenCV reports is no help, being duration times rate, where
the duration may be that of a longer sound track.

A damaged picture must not be taken for a whole one, nor make a decoder set gigabytes aside for a length that is wrong.
"""

from __future__ import annotations

import struct
import zlib
from pathlib import Path
from typing import BinaryIO

from edgewatch.sight.optics import MAX_SIDE_PX

_EBML, _SEGMENT = b"\x1a\x45\xdf\xa3", b"\x18\x53\x80\x67"
"""Element identifiers of Matroska and WebM (RFC 8794 section 11.2.1, RFC 9559 section 5.1)."""
_PNG = b"\x89PNG\r\n\x1a\n"
_MOST_BOXES = 10_000
"""Top-level boxes of an MP4; fragments make a few a second."""


def missing_bytes(path: Path) -> int:
    """How many bytes, at least, ``path`` lacks of the length stated in it; 0 if it is whole, or states none.

    Matroska and WebM, AVI, MP4 and QuickTime state their length. A recording that was never finished (power lost
    while recording to Matroska) states none either, and counts as whole. Raises ``OSError``.
    """
    size = path.stat().st_size
    with path.open("rb") as file:
        head = file.read(12)
        if head.startswith(_EBML):
            stated = _matroska(file)
        elif head.startswith(b"RIFF") and head[8:] == b"AVI ":
            stated = 8 + int.from_bytes(head[4:8], "little")
        elif head[4:8] in (b"ftyp", b"moov", b"mdat", b"wide", b"free", b"skip"):
            stated = _boxes(file, size)
        else:
            stated = 0
    return max(0, stated - size)


def _matroska(file: BinaryIO) -> int:
    """End of the segment; 0 if it does not say (RFC 8794 section 6.2: all ones is "unknown")."""
    file.seek(len(_EBML))
    header = _read_length(file)
    if header is None:
        return 0
    file.seek(header, 1)
    if file.read(len(_SEGMENT)) != _SEGMENT:
        return 0
    length = _read_length(file)
    return 0 if length is None else file.tell() + length


def _read_length(file: BinaryIO) -> int | None:
    """A variable-length integer (RFC 8794 section 4); ``None`` if it is unknown or not there."""
    first = file.read(1)
    if not first or first[0] == 0:
        return None
    extra = 8 - first[0].bit_length()
    mask = (1 << (7 - extra)) - 1
    rest = file.read(extra)
    if len(rest) < extra:
        return None
    value = (first[0] & mask) << 8 * extra | int.from_bytes(rest, "big")
    return None if value == (1 << 7 * (extra + 1)) - 1 else value


def _boxes(file: BinaryIO, size: int) -> int:
    """End of the last top-level box, or of the one that was cut (ISO/IEC 14496-12 section 4.2).

    A size of 1 means that a 64-bit one follows, 0 "the rest of the file".
    """
    at = 0
    for _ in range(_MOST_BOXES):
        if at >= size:
            break
        file.seek(at)
        head = file.read(16)
        length = int.from_bytes(head[:4], "big")
        if length == 1:
            length = int.from_bytes(head[8:16], "big")
        if length < 8 or len(head) < 8:  # the rest of the file, or junk behind the last box
            return 0
        at += length
    return at


def find_png_damage(content: bytes) -> str:
    """What is wrong with a PNG; empty if nothing is, or it is no PNG.

    Every chunk must fit into the file and match its check sum, up to the end chunk (PNG specification, 5.3).
    """
    if not content.startswith(_PNG):
        return ""
    at = len(_PNG)
    while at + 12 <= len(content):
        (length,) = struct.unpack_from(">I", content, at)
        kind, end = content[at + 4 : at + 8], at + 8 + length
        if end + 4 > len(content):
            break
        if zlib.crc32(content[at + 4 : end]) != int.from_bytes(content[end : end + 4], "big"):
            return "damaged: a check sum is wrong"
        if kind == b"IHDR" and max(struct.unpack_from(">II", content, at + 8)) > MAX_SIDE_PX:
            return f"larger than {MAX_SIDE_PX} px a side"
        if kind == b"IEND":
            return ""
        at = end + 4
    return "damaged or cut short: its end is missing"


def find_jpeg_damage(content: bytes) -> str:
    """What is wrong with the frame of a JPEG; empty if nothing is, or it is no JPEG.

    An end marker follows the last scan (ITU-T T.81, B.1.1.3); OpenCV 4 fills a missing rest with grey.
    """
    if not content.startswith(b"\xff\xd8"):
        return ""
    whole = content.rfind(b"\xff\xd9") > content.rfind(b"\xff\xda") >= 0
    return "" if whole else "damaged or cut short: its end is missing"
