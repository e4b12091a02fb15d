"""FFmpeg through OpenCV, to 8-bit luminance.

OpenCV hands out BGR. For video whose luminance lies in a plane of its own (grey, planar YUV) that detour costs time
and accuracy: limited-range values are spread and rounded twice, and monochrome H.264, which carries full range but
does not say so, is spread by mistake and clipped at both ends. So such planes are taken as they are stored, and
limited range is spread to 0..255 here, once, where the file really is of limited range.
"""

from __future__ import annotations

from typing import Any

import cv2
import numpy as np
from numpy.typing import NDArray

from edgewatch.frames.capture import GuardedCapture
from edgewatch.frames.mono import make_mono
from edgewatch.sight.optics import MAX_SIDE_PX

_GREY = b"Y800"
_PLANAR = frozenset({b"I420", b"Y42B", b"444P"})
"""FFmpeg's tags of 8-bit grey and of 8-bit YUV with luminance in a plane of its own (libavcodec/raw.c)."""

_BLACK, _WHITE = 16, 235
"""Luminance of black and white in limited-range video (ITU-R BT.601, 8 bits)."""

_BEYOND_DN = 4
_BEYOND_SHARE = 1e-4
"""More pixels than this share, further than this outside 16..235, do not come from limited-range video: the
overshoot of lossy codecs stays within a few DN and close to edges."""

_LOOK_FRAMES = 64
"""So many frames are looked through for values outside limited range; some tens of milliseconds."""


class Decoder:
    """One open video. ``rate``: frames a second it claims, NaN if none. ``close`` may come from any thread."""

    def __init__(self, capture: cv2.VideoCapture, spread: NDArray[np.uint8] | None = None) -> None:
        """Take over an open capture; ``spread`` is a table that luminance goes through."""
        self._capture = GuardedCapture(capture)
        self._spread = spread
        rate = self._capture.get(cv2.CAP_PROP_FPS)
        self.rate = rate if 0 < rate < 1e6 else float("nan")

    @property
    def closed(self) -> bool:
        """Whether ``close`` was called."""
        return self._capture.closing

    def read(self) -> NDArray[np.uint8] | None:
        """Return the next picture, ``None`` if there is none. Raises ``cv2.error``, ``ValueError``."""
        picture = _checked(self._capture.read())
        if picture is None:
            return None
        mono = make_mono(picture)
        if self._spread is not None:
            return np.asarray(cv2.LUT(mono, self._spread), dtype=np.uint8)
        return mono

    def close(self) -> None:
        """Let go of the file, at the latest when a read under way returns."""
        self._capture.close()


def open_luminance(path: str) -> Decoder:
    """Open a video file so that ``Decoder.read`` gives its luminance, 0..255. A file that cannot be opened reads none.

    Raises ``cv2.error``, ``ValueError`` (pictures too large).
    """
    shown_capture = cv2.VideoCapture(path, cv2.CAP_FFMPEG)
    shown = _read(shown_capture)
    if shown is None:
        return Decoder(shown_capture)
    tag = int(shown_capture.get(cv2.CAP_PROP_CODEC_PIXEL_FORMAT))
    layout = tag.to_bytes(4, "little") if 0 <= tag < 1 << 32 else b""
    shown_capture.release()
    if layout != _GREY and layout not in _PLANAR:
        return Decoder(cv2.VideoCapture(path, cv2.CAP_FFMPEG))
    limited = layout != _GREY and _is_limited(path, make_mono(shown))
    return Decoder(_open_plane(path), _spread_table() if limited else None)


def one_line(error: Exception) -> str:
    """The text of an OpenCV error without its line breaks and source position."""
    text = " ".join(str(error).split())
    return text[:200]


def _open_plane(path: str) -> cv2.VideoCapture:
    """Without conversion to BGR, OpenCV hands out the first plane. It must be asked for at opening (OpenCV 5)."""
    return cv2.VideoCapture(path, cv2.CAP_FFMPEG, [cv2.CAP_PROP_CONVERT_RGB, 0])


def _read(capture: cv2.VideoCapture) -> NDArray[Any] | None:
    found, picture = capture.read()
    return _checked(np.asarray(picture)) if found and picture is not None else None


def _checked(picture: NDArray[Any] | None) -> NDArray[Any] | None:
    if picture is None or picture.size == 0:
        return None
    if max(picture.shape[:2]) > MAX_SIDE_PX:
        raise ValueError(f"pictures larger than {MAX_SIDE_PX} px a side")
    return picture


def _is_limited(path: str, shown: NDArray[np.uint8]) -> bool:
    """Whether luminance is stored in 16..235: FFmpeg's own conversion ``shown`` tells what the file declares, values
    outside that range contradict it."""
    capture = _open_plane(path)
    try:
        plane = _read(capture)
        if plane is None or plane.shape != shown.shape:
            return False
        spread = np.asarray(cv2.LUT(plane, _spread_table()))
        if cv2.norm(shown, plane, cv2.NORM_L1) < cv2.norm(shown, spread, cv2.NORM_L1):
            return False
        for _ in range(_LOOK_FRAMES):
            beyond = np.count_nonzero((plane < _BLACK - _BEYOND_DN) | (plane > _WHITE + _BEYOND_DN))
            if beyond > _BEYOND_SHARE * plane.size:
                return False
            plane = _read(capture)
            if plane is None:
                break
        return True
    finally:
        capture.release()


def _spread_table() -> NDArray[np.uint8]:
    stored = np.arange(256, dtype=np.float64)
    spread = np.rint((stored - _BLACK) * 255.0 / (_WHITE - _BLACK))
    return np.clip(spread, 0, 255).astype(np.uint8)
