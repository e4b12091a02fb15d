"""How long a video file says it is, so that one that lost its end is not taken for a shorter recording.

Neither FFmpeg nor OpenCV tells a cut file from a whole one: both end without an error. The number of frames that
OpenCV reports is no help, being duration times rate, where the duration may be that of a longer sound track.
"""

from __future__ import annotations

from pathlib import Path
from typing import BinaryIO

_EBML, _SEGMENT = b"\x1a\x45\xdf\xa3", b"\x18\x53\x80\x67"
"""Element identifiers of Matroska and WebM (RFC 8794 section 11.2.1, RFC 9559 section 5.1)."""
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
