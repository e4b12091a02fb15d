"""Optics: pixels <-> millimetres, the stream's axis, the camera's timing.

Pixel coordinates: x right, y down, origin at the centre of the top-left pixel.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

MAX_SIDE_PX = 16384
"""Largest picture side accepted (px): far above any board camera, small enough that no product overflows."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Optics:
    """How a picture maps to the world. Raises ``ValueError`` naming the field that is out of range.

    ``width_px``, ``height_px``: picture size. ``mm_per_px``: scale in the plane of the stream.
    ``contact_px``: (x, y) where the bar touches the wheel; may lie outside the picture.
    ``direction_deg``: stream axis, 0 along +x, positive towards +y (so 90 is straight down).
    ``exposure_ms``, ``fps``: camera timing; the exposure fits into the frame period.
    """

    width_px: int
    height_px: int
    mm_per_px: float
    contact_px: tuple[float, float]
    direction_deg: float
    exposure_ms: float
    fps: float

    def __post_init__(self) -> None:
        """Check ranges once, so that nobody downstream has to."""
        for name in ("width_px", "height_px"):
            side = getattr(self, name)
            if not (isinstance(side, int) and 16 <= side <= MAX_SIDE_PX):
                raise ValueError(f"{name} = {side!r}: allowed are whole numbers from 16 to {MAX_SIDE_PX}")
        for name, low, high in (
            ("mm_per_px", 1e-3, 100.0),
            ("direction_deg", -360.0, 360.0),
            ("exposure_ms", 1e-3, 1000.0),
            ("fps", 0.1, 100_000.0),
        ):
            value = getattr(self, name)
            if not (math.isfinite(value) and low <= value <= high):
                raise ValueError(f"{name} = {value!r}: allowed is {low:g} to {high:g}")
        x, y = self.contact_px
        if not (math.isfinite(x) and math.isfinite(y) and max(abs(x), abs(y)) <= 4 * MAX_SIDE_PX):
            raise ValueError(f"contact_px = {self.contact_px!r}: two finite numbers (x, y) in px are needed")
        if self.exposure_ms > 1000.0 / self.fps * 1.001:
            raise ValueError(
                f"exposure_ms = {self.exposure_ms:g}: longer than the frame period of {1000.0 / self.fps:g} ms "
                f"at fps = {self.fps:g}"
            )

    @property
    def axis(self) -> tuple[float, float]:
        """Unit vector (x, y) of the stream axis in the picture."""
        angle = math.radians(self.direction_deg)
        return math.cos(angle), math.sin(angle)

    @property
    def exposure_s(self) -> float:
        """Exposure (s)."""
        return self.exposure_ms / 1000.0

    @property
    def period_s(self) -> float:
        """Time from the beginning of one exposure to the next (s)."""
        return 1.0 / self.fps

    def along_mm(self, points_px: NDArray[np.floating]) -> NDArray[np.float64]:
        """Distance from the contact point along the stream axis (mm) of points of shape (…, 2) in px."""
        ax, ay = self.axis
        points = np.asarray(points_px, dtype=np.float64)
        x0, y0 = self.contact_px
        return np.asarray(((points[..., 0] - x0) * ax + (points[..., 1] - y0) * ay) * self.mm_per_px)

    def cropped(self, x_px: int, y_px: int, width_px: int, height_px: int) -> Optics:
        """Optics of a region of interest whose top-left pixel is (x_px, y_px) of this picture."""
        x0, y0 = self.contact_px
        return Optics(
            width_px=width_px,
            height_px=height_px,
            mm_per_px=self.mm_per_px,
            contact_px=(x0 - x_px, y0 - y_px),
            direction_deg=self.direction_deg,
            exposure_ms=self.exposure_ms,
            fps=self.fps,
        )

    def binned(self, factor: int) -> Optics:
        """Optics after averaging ``factor`` x ``factor`` pixels into one; odd rest columns and rows are dropped."""
        if factor < 1:
            raise ValueError(f"factor = {factor}: at least 1")
        x0, y0 = self.contact_px
        shift = (factor - 1) / 2.0  # the new pixel's centre lies between its parts' centres
        return Optics(
            width_px=self.width_px // factor,
            height_px=self.height_px // factor,
            mm_per_px=self.mm_per_px * factor,
            contact_px=((x0 - shift) / factor, (y0 - shift) / factor),
            direction_deg=self.direction_deg,
            exposure_ms=self.exposure_ms,
            fps=self.fps,
        )
