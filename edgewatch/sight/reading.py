"""Reading a picture at points between pixels."""

from __future__ import annotations

from typing import Any

import cv2
import numpy as np
from numpy.typing import NDArray

_cv: Any = cv2  # its own type hints differ between versions and forbid what it takes

ROW = 1024
"""Points are handed to ``remap`` in rows of this many: it takes pictures, no longer than 32767 a side."""


def read_levels(image: NDArray[np.float32], x: NDArray[np.floating], y: NDArray[np.floating]) -> NDArray[np.float32]:
    """Bilinear values of ``image`` float32 (H, W) at points x, y (N,) in px; outside it is dark (0)."""
    count = x.size
    if not count:
        return np.zeros(0, np.float32)
    rows = -(-count // ROW)
    points = np.full((2, rows * ROW), -9.0, np.float32)
    points[0, :count] = x
    points[1, :count] = y
    read = _cv.remap(
        image,
        points[0].reshape(rows, ROW),
        points[1].reshape(rows, ROW),
        cv2.INTER_LINEAR,
        borderMode=cv2.BORDER_CONSTANT,
    )
    return np.asarray(read.ravel()[:count])
