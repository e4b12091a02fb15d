"""Reduce a picture before it is looked at: region of interest, binning; ``Optics.cropped`` and ``binned`` follow."""

from __future__ import annotations

from collections.abc import Sequence

import cv2
import numpy as np
from numpy.typing import NDArray


def reduce_picture(
    picture: NDArray[np.uint8], region_px: Sequence[int] | None = None, binning: int = 1
) -> NDArray[np.uint8]:
    """Cut ``region_px`` (x, y, width, height) out of ``picture`` (H, W) and average ``binning`` x ``binning`` pixels.

    Columns and rows that do not fill a bin are dropped at the right and the bottom. Without region and binning the
    picture itself is returned, not a copy. Raises ``ValueError`` when the region reaches beyond the picture or nothing
    would be left.
    """
    height, width = picture.shape
    if region_px:
        x, y, across, down = region_px
        if x < 0 or y < 0 or across < 1 or down < 1 or x + across > width or y + down > height:
            raise ValueError(f"region_px = {tuple(region_px)}: reaches beyond the picture of {width} x {height} px")
        picture = picture[y : y + down, x : x + across]
        height, width = down, across
    if binning == 1:
        return picture
    if binning < 1 or binning > min(height, width):
        raise ValueError(f"binning = {binning}: from 1 to {min(height, width)}")
    down, across = height // binning, width // binning
    whole = picture[: down * binning, : across * binning]
    return np.asarray(cv2.resize(whole, (across, down), interpolation=cv2.INTER_AREA), np.uint8)
