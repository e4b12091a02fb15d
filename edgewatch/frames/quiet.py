"""Keep OpenCV and FFmpeg from writing to stderr: what goes wrong is said once, by us, in one line."""

from __future__ import annotations

import os
from typing import Any

import cv2

_FFMPEG_QUIET = "-8"
"""FFmpeg's AV_LOG_QUIET (libavutil/log.h)."""

_OPENCV_SILENT = 0
"""OpenCV's LOG_LEVEL_SILENT (core/utils/logger.defines.hpp)."""


def hush() -> None:
    """Silence both libraries; called before each opening, does no harm when repeated.

    OpenCV reads the FFmpeg level from the environment when its first capture is made. Both stay as they are where the
    operator has set them, so that a fault can be looked into.
    """
    os.environ.setdefault("OPENCV_FFMPEG_LOGLEVEL", _FFMPEG_QUIET)
    if "OPENCV_LOG_LEVEL" not in os.environ:
        logging: Any = cv2 if hasattr(cv2, "setLogLevel") else cv2.utils.logging  # OpenCV 4, OpenCV 5
        logging.setLogLevel(_OPENCV_SILENT)
