"""Ridge points: where a bright line runs, in which direction, with sub-pixel position.

C. Steger, "An unbiased detector of curvilinear structures", IEEE Trans. PAMI 20 (1998) 113-125: at each pixel of the
smoothed picture the second derivatives give the direction across the line and, with the first derivatives, the place
of the ridge's crest; the pixel is a ridge point when the crest lies within it. Only pixels that are a local maximum
along a row or a column can be one, so the dense work is a blur and a few comparisons; the rest runs on a few per cent
of the pixels.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import cv2
import numpy as np
from numpy.typing import NDArray

from edgewatch.sight import native
from edgewatch.sight.native import records

_cv: Any = cv2  # its own type hints differ between versions and forbid what it takes

BLUR_PX = 0.6
"""Standard deviation of the blur (px). Steger asks for width / sqrt(3), about one pixel; less keeps streaks two pixels
apart from running into each other, which matters more here, and noise is dealt with by the length of what is linked."""

_PARTS = 256
_GAUSS = np.exp(-0.5 * (np.arange(3) / BLUR_PX) ** 2)
_OUTER, _INNER = (round(float(_PARTS * _GAUSS[k] / (2.0 * _GAUSS.sum() - 1.0))) for k in (2, 1))
_TAPS = np.asarray([_OUTER, _INNER, _PARTS - 2 * (_OUTER + _INNER), _INNER, _OUTER], np.float32) / np.float32(_PARTS)
"""The Gaussian rounded to whole 1/256 that sum to one: a value of the blurred picture is then a whole number of
1/65536, below 2^24 of them, which single precision holds exactly, in whatever order it is added up."""

NOISE_GAIN = float((_TAPS**2).sum())
"""Noise of the blurred picture per noise of the picture (white noise, separable kernel)."""

THRESHOLD_NOISE = 4.5
"""A ridge point stands this many deviations of the blurred picture's noise above the background."""

CREST_PX = 0.65
"""The crest lies within this much of the pixel's centre, in x and in y (px); 0.5 would leave gaps on noise."""

LEAST_BEND = 0.06
"""Curvature across a ridge, as a share of its height: that of a streak nine pixels wide. The flank of a streak, where
noise makes maxima along it, bends less or the other way."""

ROOM = 8192
"""The compiled form makes room for so many points to begin with: twice what a full stream has."""

MARGIN_PX = 3
"""Ridge points nearer to the edge than this are not looked for (px)."""


@dataclass(frozen=True, slots=True, eq=False)
class Ridges:
    """Ridge points of one picture, all arrays of length N.

    ``index``: int64 or int32, flat pixel index, rising. ``x``, ``y``: float32, crest (px). ``cos``, ``sin``: float32,
    unit vector along the ridge. ``height``: float32, blurred picture at the pixel (DN). ``bend``: float32, minus the
    second derivative across (DN/px²). ``offset``: float32, crest from the pixel's centre, across (px).
    ``threshold_noise``: noise of the blurred picture (DN). ``blurred``: float32 (H, W), the blurred picture.
    ``excess``: uint8 (H, W), what it was made from. ``columns``: the values above as one array (7, at least N),
    where the compiled form made them.
    """

    index: NDArray[np.int64] | NDArray[np.int32]
    x: NDArray[np.float32]
    y: NDArray[np.float32]
    cos: NDArray[np.float32]
    sin: NDArray[np.float32]
    height: NDArray[np.float32]
    bend: NDArray[np.float32]
    offset: NDArray[np.float32]
    threshold_noise: float
    blurred: NDArray[np.float32]
    excess: NDArray[np.uint8]
    columns: NDArray[np.float32] | None = None


def find_ridges(excess: NDArray[np.uint8], noise_dn: float) -> Ridges:
    """Ridge points of a picture less its background, uint8 (H, W); ``noise_dn``: its noise (DN)."""
    if native.LIBRARY:
        return _find_compiled(np.ascontiguousarray(excess), noise_dn)
    blurred: NDArray[np.float32] = _cv.sepFilter2D(excess, cv2.CV_32F, _TAPS, _TAPS)
    width = excess.shape[1]
    index = _candidates(blurred, THRESHOLD_NOISE * NOISE_GAIN * noise_dn)
    flat = blurred.ravel()
    centre = flat.take(index)
    left, right = flat.take(index - 1), flat.take(index + 1)
    above, below = flat.take(index - width), flat.take(index + width)
    diagonal = flat.take(index - width - 1) + flat.take(index + width + 1)
    diagonal -= flat.take(index - width + 1) + flat.take(index + width - 1)
    bxx = left + right - 2.0 * centre
    byy = above + below - 2.0 * centre
    bxy = 0.25 * diagonal
    # The eigenvector of the most negative second derivative points across the line; the other one along it.
    angle = 0.5 * np.arctan2(2.0 * bxy, bxx - byy)  # of the direction along
    cos, sin = np.cos(angle), np.sin(angle)
    across = bxx * sin * sin - 2.0 * bxy * sin * cos + byy * cos * cos
    slope = 0.5 * ((right - left) * -sin + (below - above) * cos)
    with np.errstate(divide="ignore", invalid="ignore"):
        # the greater of the two second derivatives by amount, and it is that of a crest
        crest = -across > np.maximum(LEAST_BEND * centre, bxx + byy - across)
        step = np.where(crest, -slope / across, np.float32(math.inf))
        keep = (np.abs(step * sin) <= CREST_PX) & (np.abs(step * cos) <= CREST_PX)
    kept = np.flatnonzero(keep)
    index, step, cos, sin = index[kept], step[kept], cos[kept], sin[kept]
    row, column = np.divmod(index, width)
    return Ridges(
        index=index,
        x=column.astype(np.float32) - step * sin,
        y=row.astype(np.float32) + step * cos,
        cos=cos,
        sin=sin,
        height=centre[kept],
        bend=-across[kept],
        offset=step,
        threshold_noise=NOISE_GAIN * noise_dn,
        blurred=blurred,
        excess=excess,
    )


def _find_compiled(excess: NDArray[np.uint8], noise_dn: float) -> Ridges:
    height, width = excess.shape
    blurred, room = np.empty(excess.shape, np.float32), ROOM
    rules = records.RidgeRules(
        threshold=THRESHOLD_NOISE * NOISE_GAIN * noise_dn,
        crest_px=CREST_PX,
        least_bend=LEAST_BEND,
        margin=MARGIN_PX,
        inner=_INNER,
        outer=_OUTER,
    )
    while True:
        index, columns = np.empty(room + 1, np.int32), np.empty((7, room + 1), np.float32)
        count = native.LIBRARY.edgewatch_ridges(
            native.start(excess),
            height,
            width,
            native.reference(rules),
            native.start(blurred),
            native.start(index),
            native.start(columns),
            room,
        )
        if native.enough(count, room):
            break
        room = count
    x, y, cos, sin, level, bend, offset = columns[:, :count]
    return Ridges(
        index=index[:count],
        x=x,
        y=y,
        cos=cos,
        sin=sin,
        height=level,
        bend=bend,
        offset=offset,
        threshold_noise=NOISE_GAIN * noise_dn,
        blurred=blurred,
        excess=excess,
        columns=columns,
    )


def _candidates(blurred: NDArray[np.float32], threshold: float) -> NDArray[np.int64]:
    """Flat indices of pixels above the threshold that are a local maximum along their row or their column.

    Compared as one long row: neighbours are then plain shifts, and what wraps at the edges falls in the margin.
    """
    width, flat = blurred.shape[1], blurred.ravel()
    centre = flat[width:-width]
    found = np.zeros(flat.size, np.bool_)
    top = found[width:-width]
    np.greater_equal(centre, flat[width - 1 : -width - 1], out=top)
    top &= centre > flat[width + 1 : flat.size - width + 1]
    along_column = centre >= flat[: -2 * width]
    along_column &= centre > flat[2 * width :]
    top |= along_column
    top &= centre > threshold
    whole = found.reshape(blurred.shape)
    whole[:MARGIN_PX] = whole[-MARGIN_PX:] = False
    whole[:, :MARGIN_PX] = whole[:, -MARGIN_PX:] = False
    return np.flatnonzero(found)
