"""Any decoded picture -> 8-bit mono."""

from __future__ import annotations

from typing import Any

import cv2
import numpy as np
from numpy.typing import NDArray


def make_mono(picture: NDArray[Any]) -> NDArray[np.uint8]:
    """Return the luminance of ``picture``: uint8 or uint16, (height, width) or (height, width, 1, 3 or 4), BGR(A).

    Grey values survive unchanged (equal blue, green and red give that value exactly); colour is weighed as in ITU-R
    BT.601; of 16 bits the upper eight are kept; alpha is dropped. Raises ``ValueError`` for any other layout.
    """
    if picture.dtype == np.uint16:
        picture = (picture >> 8).astype(np.uint8)
    if picture.dtype != np.uint8:
        raise ValueError(f"pixels of type {picture.dtype}: 8 or 16 bits without sign are needed")
    if picture.ndim == 3 and picture.shape[2] == 1:
        picture = picture[:, :, 0]
    elif picture.ndim == 3 and picture.shape[2] == 3:
        picture = cv2.cvtColor(picture, cv2.COLOR_BGR2GRAY)
    elif picture.ndim == 3 and picture.shape[2] == 4:
        picture = cv2.cvtColor(picture, cv2.COLOR_BGRA2GRAY)
    if picture.ndim != 2:
        raise ValueError(f"a picture of shape {picture.shape}")
    return np.ascontiguousarray(picture)
