"""A network stream, read by FFmpeg through OpenCV, with time-outs for opening and for silence."""

from __future__ import annotations

import re
import time
from urllib.parse import urlsplit

import cv2

from edgewatch.errors import DeviceError, SettingsError
from edgewatch.frames.capture import GuardedCapture
from edgewatch.frames.luminance import one_line
from edgewatch.frames.mono import make_mono
from edgewatch.frames.quiet import hush
from edgewatch.frames.values import Frame, Source, SourceInfo
from edgewatch.settings import Settings

PROTOCOLS = frozenset({"rtsp", "rtsps", "http", "https", "tcp", "udp", "rtp", "srt"})
"""What may stand before ``://``. Others that FFmpeg knows reach into files and other programs."""

OPEN_S = 10.0
"""Longest wait for a server and its first pictures (s)."""
_LEAST_SILENCE_S = 5.0
"""A connection silent for this long, and for twice ``source.stall_s``, is given up and made anew (s)."""

_CREDENTIALS = re.compile(r"://[^/@\s]*@")


def open_stream(rest: str, settings: Settings, live: bool = True) -> Source:
    """Connect to the URL ``rest``. Raises ``SettingsError``, ``DeviceError``."""
    shown = hide_credentials(rest)
    try:
        parts = urlsplit(rest)
        good = parts.scheme.lower() in PROTOCOLS and bool(parts.hostname)
    except ValueError:
        good = False
    if not good:
        known = ", ".join(f"{name}://" for name in sorted(PROTOCOLS))
        raise SettingsError(f'source.uri = "stream:{shown}": allowed is a URL that begins with one of {known}')
    return Stream(rest, silence_s=max(_LEAST_SILENCE_S, 2.0 * settings.source.stall_s))


def hide_credentials(url: str) -> str:
    """The URL without user and password: no secret goes into a message or a log."""
    return _CREDENTIALS.sub("://", url)


class Stream:
    """A connected stream. See ``Source``; times are on the monotonic clock, when the picture was decoded."""

    def __init__(self, url: str, *, open_s: float = OPEN_S, silence_s: float = _LEAST_SILENCE_S) -> None:
        """Connect; after ``silence_s`` without data the stream is lost. Raises ``DeviceError``."""
        self._shown = hide_credentials(url)
        self._silence_s = silence_s
        hush()
        options = [cv2.CAP_PROP_OPEN_TIMEOUT_MSEC, round(open_s * 1000)]
        options += [cv2.CAP_PROP_READ_TIMEOUT_MSEC, round(silence_s * 1000)]
        try:
            capture = cv2.VideoCapture(url, cv2.CAP_FFMPEG, options)
            if not capture.isOpened():
                raise DeviceError(f"stream {self._shown}: no server, or no video that FFmpeg can read")
        except cv2.error as error:
            raise DeviceError(f"stream {self._shown}: cannot be opened: {one_line(error)}") from error
        rate = float(capture.get(cv2.CAP_PROP_FPS))
        self._info = SourceInfo(
            uri=f"stream:{self._shown}",
            width_px=int(capture.get(cv2.CAP_PROP_FRAME_WIDTH)),
            height_px=int(capture.get(cv2.CAP_PROP_FRAME_HEIGHT)),
            fps=rate if 0 < rate < 1e6 else float("nan"),
            live=True,
        )
        self._capture = GuardedCapture(capture)
        self._index = 0

    @property
    def info(self) -> SourceInfo:
        """What was opened."""
        return self._info

    def read(self, timeout_s: float) -> Frame | None:
        """Return the next frame, ``None`` after ``close``.

        FFmpeg waits for the connection's own limit whatever ``timeout_s`` says: read through ``Newest``. Raises
        ``DeviceError`` when the stream ends, falls silent, or cannot be decoded.
        """
        begin_s = time.monotonic()
        try:
            picture = self._capture.read()
            if picture is None:
                if self._capture.closing:
                    return None
                silent = time.monotonic() - begin_s >= 0.9 * self._silence_s
                why = f"silent for {self._silence_s:g} s" if silent else "the server has ended it"
                raise DeviceError(f"stream {self._shown}: {why}")
            mono = make_mono(picture)
        except (cv2.error, ValueError) as error:
            raise DeviceError(f"stream {self._shown}: cannot be decoded: {one_line(error)}") from error
        frame = Frame(picture=mono, index=self._index, t_s=time.monotonic())
        self._index += 1
        return frame

    def close(self) -> None:
        """Hang up, at the latest when a read under way returns."""
        self._capture.close()
