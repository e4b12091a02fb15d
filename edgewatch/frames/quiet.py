"""Keep OpenCV and FFmpeg from writing to stderr: what goes wrong is said once, by us, in one line."""

from __future__ import annotations

import contextlib
import os
import re
import threading
from collections.abc import Iterator
from typing import Any

import cv2

_FFMPEG_QUIET = "-8"
"""FFmpeg's AV_LOG_QUIET (libavutil/log.h)."""

_OPENCV_SILENT = 0
"""OpenCV's LOG_LEVEL_SILENT (core/utils/logger.defines.hpp)."""

_ONE_AT_A_TIME = threading.Lock()
_MOST_HEARD = 65536
_LIBRARIES = re.compile(
    "libpng |Corrupt JPEG|Premature end of JPEG|Invalid SOS|Inconsistent progression|Unsupported |"
    "Warning: unknown JFIF|Warning: thumbnail|Unknown Adobe|Unrecognized component|TIFF|imdecode_"
)
"""How lines of libpng, libjpeg, libtiff and OpenCV 4's decoder begin."""
_HARMLESS = re.compile(
    r"libpng warning|Warning: |Unknown Adobe|Unrecognized component|Corrupt JPEG data: \d extraneous"
)
"""Odd headers and colour profiles, and the few stray bytes that many cameras write before an end marker."""


def hush() -> None:
    """Silence both libraries; called before each opening, does no harm when repeated.

    OpenCV reads the FFmpeg level from the environment when its first capture is made. Both stay as they are where the
    operator has set them, so that a fault can be looked into.
    """
    os.environ.setdefault("OPENCV_FFMPEG_LOGLEVEL", _FFMPEG_QUIET)
    if "OPENCV_LOG_LEVEL" not in os.environ:
        logging: Any = cv2 if hasattr(cv2, "setLogLevel") else cv2.utils.logging  # OpenCV 4, OpenCV 5
        logging.setLogLevel(_OPENCV_SILENT)


@contextlib.contextmanager
def overhear() -> Iterator[list[str]]:
    """Collect what picture libraries write to stderr within; the list is filled at the end.

    libpng and libjpeg write there past OpenCV's log, and for some damage that is the only sign: the picture comes back
    as if it were whole. What others wrote meanwhile is passed on.
    """
    heard: list[str] = []
    with _ONE_AT_A_TIME:
        try:
            real = os.dup(2)
        except OSError:  # a service without stderr: nothing can be written there either
            yield heard
            return
        ear = os.memfd_create("overheard", os.MFD_CLOEXEC)
        os.dup2(ear, 2)
        try:
            yield heard
        finally:
            os.dup2(real, 2)
            written = os.pread(ear, _MOST_HEARD, 0)
            os.close(ear)
            lines = written.decode("utf-8", "replace").splitlines()
            heard += [line for line in lines if _LIBRARIES.match(line)]
            others = [line for line in lines if line and not _LIBRARIES.match(line)]
            if others:
                os.write(real, ("\n".join(others) + "\n").encode("utf-8", "replace"))
            os.close(real)


def is_damage(line: str) -> bool:
    """Whether an overheard line means that the picture is not what was written, rather than odd but whole."""
    return not _HARMLESS.match(line)
