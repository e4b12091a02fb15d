"""The scale of a camera from a checkerboard or from two marked points, with its uncertainty.

The board is held in the plane of the stream, square to the camera. What is said of the scale is an expanded
uncertainty (coverage factor 2, about 95 %; JCGM 100:2008, GUM) from the scatter of the corners, the board's own error,
and the change of scale over the board, which shows tilt or lens distortion.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import cv2
import numpy as np
from numpy.typing import NDArray

COVERAGE_FACTOR = 2.0
_LEAST_CORNERS, _MOST_CORNERS = 3, 60
_REFINE_STEPS, _REFINE_PX = 50, 0.005
"""Corner refinement ends after so many steps or a step this small."""
_TILT_WORTH_SAYING = 0.01
"""A scale that changes by more than this share over the board: it was not held square to the camera."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Scale:
    """``mm_per_px`` with its expanded uncertainty ``plus_minus`` (mm per px, coverage factor 2).

    ``rms_px``: scatter of the corners about the fitted board (NaN for two points); ``change``: relative change of
    scale from one end of the board to the other (NaN for two points); ``corners``: how many were used; ``remarks``:
    what should be mended before the scale is trusted.
    """

    mm_per_px: float
    plus_minus: float
    rms_px: float
    change: float
    corners: int
    remarks: tuple[str, ...]


def find_corners(picture: NDArray[np.uint8], columns: int, rows: int) -> NDArray[np.float64] | None:
    """Inner corners of a checkerboard in ``picture``, uint8 (H, W): float64 (rows · columns, 2), x y in px, row by row.

    ``columns`` and ``rows`` count inner corners, one less than squares. ``None`` if the whole board is not found.
    Raises ``ValueError`` if there are fewer than 3 or more than 60 a side.
    """
    for name, count in (("columns", columns), ("rows", rows)):
        if not _LEAST_CORNERS <= count <= _MOST_CORNERS:
            raise ValueError(f"{name} = {count}: from {_LEAST_CORNERS} to {_MOST_CORNERS} inner corners a side")
    flags = cv2.CALIB_CB_ADAPTIVE_THRESH | cv2.CALIB_CB_NORMALIZE_IMAGE
    found, corners = cv2.findChessboardCorners(picture, (columns, rows), flags=flags)
    if not found:
        return None
    corners = np.asarray(corners, np.float32).reshape(-1, 1, 2)
    half = _half_window(corners.reshape(rows, columns, 2))
    stop = (cv2.TERM_CRITERIA_EPS | cv2.TERM_CRITERIA_MAX_ITER, _REFINE_STEPS, _REFINE_PX)
    refined = cv2.cornerSubPix(picture, corners, (half, half), (-1, -1), stop)
    return np.asarray(refined, np.float64).reshape(-1, 2)


def scale_of_board(
    corners_px: NDArray[np.float64], columns: int, rows: int, *, square_mm: float, board_error: float = 0.0
) -> Scale:
    """Fit the board (a similarity, mirrored or not) to its corners, float64 (rows · columns, 2) in px.

    ``square_mm``: side of one square; ``board_error``: its largest relative error (0.002: the print is true to 0.2 %).
    Raises ``ValueError`` on senseless arguments.
    """
    if not (math.isfinite(square_mm) and square_mm > 0 and 0 <= board_error < 1):
        raise ValueError(f"square_mm = {square_mm!r}, board_error = {board_error!r}: a size and a share are needed")
    if corners_px.shape != (rows * columns, 2) or not np.isfinite(corners_px).all():
        raise ValueError(f"corners_px: {rows * columns} finite points are needed")
    grid = (
        np.stack(np.meshgrid(np.arange(columns), np.arange(rows)), axis=-1).reshape(-1, 2).astype(np.float64)
        * square_mm
    )
    board = grid[:, 0] + 1j * grid[:, 1]
    seen = corners_px[:, 0] + 1j * corners_px[:, 1]
    px_per_mm, rest = min((_fit(board, seen), _fit(board.conj(), seen)), key=lambda fit: fit[1])
    rms_px = math.sqrt(rest / len(seen))
    spread = float(np.sum(np.abs(board - board.mean()) ** 2))
    fit_error = math.sqrt(rest / (2 * len(seen) - 4) / spread) / px_per_mm
    change = _change(grid, corners_px)
    # Evenly distributed within its limits: a standard deviation of half the width over √3 (GUM 4.3.7).
    relative = math.hypot(fit_error, change / 2.0 / math.sqrt(3.0), board_error / math.sqrt(3.0))
    remarks = []
    if change > _TILT_WORTH_SAYING:
        remarks.append(
            f"the scale changes by {100 * change:.1f} % over the board: hold it square to the camera, in the plane of "
            "the stream; if it is, the lens distorts"
        )
    return Scale(
        mm_per_px=1.0 / px_per_mm,
        plus_minus=COVERAGE_FACTOR * relative / px_per_mm,
        rms_px=rms_px,
        change=change,
        corners=len(seen),
        remarks=tuple(remarks),
    )


def scale_of_points(
    one_px: tuple[float, float], two_px: tuple[float, float], *, distance_mm: float, point_error_px: float = 0.5
) -> Scale:
    """Scale from two points a known distance apart, each marked with a standard uncertainty of ``point_error_px``.

    Raises ``ValueError`` if the points coincide or a number is senseless.
    """
    length_px = math.dist(one_px, two_px)
    if not (math.isfinite(length_px) and length_px > 0):
        raise ValueError(f"points {one_px} and {two_px}: two different points are needed")
    if not (math.isfinite(distance_mm) and distance_mm > 0 and math.isfinite(point_error_px) and point_error_px >= 0):
        raise ValueError(f"distance_mm = {distance_mm!r}, point_error_px = {point_error_px!r}: lengths are needed")
    scale = distance_mm / length_px
    relative = math.sqrt(2.0) * point_error_px / length_px
    return Scale(
        mm_per_px=scale,
        plus_minus=COVERAGE_FACTOR * scale * relative,
        rms_px=math.nan,
        change=math.nan,
        corners=2,
        remarks=(),
    )


def _half_window(grid: NDArray[np.float32]) -> int:
    """Half the side of the window in which a corner is refined (px): it must not reach the next corner."""
    apart = min(float(np.linalg.norm(np.diff(grid, axis=axis), axis=-1).min()) for axis in (0, 1))
    return max(2, min(11, int(apart / 3.0)))


def _fit(board: NDArray[np.complex128], seen: NDArray[np.complex128]) -> tuple[float, float]:
    """Least squares of ``seen = a · board + b``: scale |a| and the sum of squares left (px²)."""
    flat, shown = board - board.mean(), seen - seen.mean()
    a = np.vdot(flat, shown) / np.vdot(flat, flat)
    return float(abs(a)), float(np.sum(np.abs(shown - a * flat) ** 2))


def _change(grid: NDArray[np.float64], corners_px: NDArray[np.float64]) -> float:
    """Relative change of scale over the board, position and direction alike: largest to smallest singular value of the
    board-to-picture map over the corners, less one. The map is a homography, so tilt is taken in exactly.
    """
    found: Any = cv2.findHomography(grid, corners_px)[0]
    if found is None:  # the corners lie on a line
        return math.inf
    homography = np.asarray(found, np.float64)
    homogeneous = np.column_stack([grid, np.ones(len(grid))]) @ homography.T
    depth = homogeneous[:, 2]
    shown = homogeneous[:, :2] / depth[:, None]
    jacobian = (homography[None, :2, :2] - shown[:, :, None] * homography[None, 2:, :2]) / depth[:, None, None]
    stretch = np.linalg.svd(jacobian, compute_uv=False)
    return float(stretch.max() / stretch.min() - 1.0)
