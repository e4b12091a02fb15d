"""Draw what was seen into a picture: streaks, bursts, the axis, a scale bar, captions below."""

from __future__ import annotations

from collections.abc import Sequence

import cv2
import numpy as np
from numpy.typing import NDArray

from edgewatch.sight.detections import BurstFlag, Detections
from edgewatch.sight.optics import Optics

# Colours in OpenCV's order (blue, green, red), chosen to be told apart by colour-blind people too (Okabe & Ito 2008).
_STREAK = (233, 180, 86)  # sky blue
_BURST = (0, 159, 230)  # orange
_LATE = (167, 121, 204)  # reddish purple
_AXIS = (115, 158, 0)  # bluish green
_TEXT = (235, 235, 235)
_SHIFT = 4
"""Bits of sub-pixel position that cv2's drawing functions take."""
_LINE_PX = 20
"""Height of one caption line (px)."""
SMALLEST_WIDTH_PX = 480
"""Narrower pictures are widened so that captions stay readable (px)."""


def annotate(
    picture: NDArray[np.uint8], detections: Detections, optics: Optics, captions: Sequence[str] = ()
) -> NDArray[np.uint8]:
    """Return a colour picture (H', W', 3), BGR, uint8: detections drawn over ``picture`` (H, W), captions below it.

    Pictures narrower than ``SMALLEST_WIDTH_PX`` are enlarged by a whole factor first.
    """
    factor = max(1, -(-SMALLEST_WIDTH_PX // picture.shape[1]))
    grey = cv2.resize(picture, None, fx=factor, fy=factor, interpolation=cv2.INTER_NEAREST) if factor > 1 else picture
    canvas = np.asarray(cv2.cvtColor(grey, cv2.COLOR_GRAY2BGR), np.uint8)
    _draw_axis(canvas, optics, factor)
    scale = factor * (1 << _SHIFT)
    offset = (factor - 1) / 2 * (1 << _SHIFT)
    lines = np.rint(detections.streaks * scale + offset).astype(np.int32).reshape(-1, 2, 2)
    cv2.polylines(canvas, list(lines), False, _STREAK, 1, cv2.LINE_AA, _SHIFT)
    radius = round(7 * factor * (1 << _SHIFT))
    centres = np.rint(detections.bursts * scale + offset).astype(np.int64)
    for (x, y), flags in zip(centres.tolist(), detections.burst_flags.tolist(), strict=True):
        cv2.circle(canvas, (x, y), radius, _LATE if flags & BurstFlag.LATE else _BURST, 1, cv2.LINE_AA, _SHIFT)
    return _with_captions(canvas, captions)


def encode_jpeg(picture: NDArray[np.uint8], *, quality: int = 88) -> bytes:
    """JPEG bytes of a grey or BGR picture. Raises ``ValueError`` if it cannot be encoded."""
    good, data = cv2.imencode(".jpg", picture, [cv2.IMWRITE_JPEG_QUALITY, quality])
    if not good:
        raise ValueError(f"a picture of shape {picture.shape} cannot be encoded as JPEG")
    return bytes(data.tobytes())


def _draw_axis(canvas: NDArray[np.uint8], optics: Optics, factor: int) -> None:
    """Contact point, stream axis, and a tick every 100 mm along it."""
    ax, ay = optics.axis
    x0, y0 = optics.contact_px
    far = float(np.hypot(optics.width_px, optics.height_px)) + float(np.hypot(x0, y0))
    step = 100.0 / optics.mm_per_px
    ticks = np.arange(0.0, far, step)[:200]
    for distance in ticks.tolist():
        x, y = (x0 + ax * distance) * factor, (y0 + ay * distance) * factor
        if not (0 <= x < canvas.shape[1] and 0 <= y < canvas.shape[0]):
            continue
        size = 6 * factor
        begin = (round(x + ay * size), round(y - ax * size))
        end = (round(x - ay * size), round(y + ax * size))
        cv2.line(canvas, begin, end, _AXIS, 1, cv2.LINE_AA)
    if 0 <= x0 < optics.width_px and 0 <= y0 < optics.height_px:
        cv2.drawMarker(canvas, (round(x0 * factor), round(y0 * factor)), _AXIS, cv2.MARKER_TILTED_CROSS, 12 * factor, 1)


def _with_captions(canvas: NDArray[np.uint8], captions: Sequence[str]) -> NDArray[np.uint8]:
    if not captions:
        return canvas
    strip = np.zeros((_LINE_PX * len(captions) + 8, canvas.shape[1], 3), np.uint8)
    for row, text in enumerate(captions):
        plain = text.encode("ascii", "replace").decode("ascii")  # OpenCV's fonts know no more
        at = (6, _LINE_PX * (row + 1) - 4)
        cv2.putText(strip, plain, at, cv2.FONT_HERSHEY_SIMPLEX, 0.45, _TEXT, 1, cv2.LINE_AA)
    return np.vstack([canvas, strip])
