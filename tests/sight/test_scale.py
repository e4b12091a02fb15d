"""The scale of rendered boards whose true scale is known."""

from __future__ import annotations

import math

import cv2
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray

from edgewatch.sight.scale import Scale, find_corners, scale_of_board, scale_of_points

COLUMNS, ROWS, SQUARE_MM = 9, 6, 10.0


def board_picture(
    px_per_mm: float = 4.0,
    *,
    turn_deg: float = 0.0,
    tilt_deg: float = 0.0,
    distance_mm: float = 800.0,
    mirrored: bool = False,
    noise_dn: float = 2.0,
    seed: int = 1,
) -> NDArray[np.uint8]:
    """A 640 x 480 picture of the board, drawn at four times the size and averaged; tilted about its upright axis."""
    fine = 4
    across, down = (COLUMNS + 1) * SQUARE_MM, (ROWS + 1) * SQUARE_MM
    dots = 20
    squares = np.indices((ROWS + 1, COLUMNS + 1)).sum(axis=0) % 2
    board = np.kron(squares, np.ones((dots, dots))) * 200.0 + 20.0
    board = cv2.copyMakeBorder(board, dots, dots, dots, dots, cv2.BORDER_CONSTANT, value=220.0)
    mm = np.diag([SQUARE_MM / dots, SQUARE_MM / dots, 1.0])
    mm[:2, 2] = SQUARE_MM / dots * 0.5 - SQUARE_MM  # pixel centres; the border of one square
    centre = np.array([[1.0, 0, -across / 2], [0, 1, -down / 2], [0, 0, 1]])
    turn, tilt = math.radians(turn_deg), math.radians(tilt_deg)
    rotation = np.array([[math.cos(turn), -math.sin(turn), 0], [math.sin(turn), math.cos(turn), 0], [0, 0, 1]])
    flip = np.diag([-1.0 if mirrored else 1.0, 1.0, 1.0])
    pinhole = np.array([[math.cos(tilt), 0, 0], [0, 1, 0], [math.sin(tilt) / distance_mm, 0, 1]])
    picture = np.diag([px_per_mm, px_per_mm, 1.0])
    picture[:2, 2] = 320.2, 239.7
    zoom = np.array([[fine, 0, (fine - 1) / 2], [0, fine, (fine - 1) / 2], [0, 0, 1]])
    whole = zoom @ picture @ pinhole @ flip @ rotation @ centre @ mm
    large = cv2.warpPerspective(board, whole, (640 * fine, 480 * fine), borderValue=220.0, flags=cv2.INTER_LINEAR)
    small = cv2.resize(large, (640, 480), interpolation=cv2.INTER_AREA)
    noisy = small + np.random.default_rng(seed).normal(0.0, noise_dn, small.shape)
    return np.clip(np.rint(noisy), 0, 255).astype(np.uint8)


def measure(picture: NDArray[np.uint8], board_error: float = 0.0) -> Scale:
    """The scale from a picture."""
    corners = find_corners(picture, COLUMNS, ROWS)
    assert corners is not None
    return scale_of_board(corners, COLUMNS, ROWS, square_mm=SQUARE_MM, board_error=board_error)


@pytest.mark.parametrize(
    ("px_per_mm", "turn_deg", "mirrored"),
    [(4.0, 0.0, False), (3.3, 17.0, False), (2.1, 90.0, False), (1.4, 200.0, True), (4.2, -8.0, True)],
)
def test_true_scale_lies_within_its_uncertainty(px_per_mm: float, turn_deg: float, mirrored: bool) -> None:
    """However the board is turned, and in a mirror: the truth lies within a narrow interval; corners fit to 0.1 px."""
    found = measure(board_picture(px_per_mm, turn_deg=turn_deg, mirrored=mirrored))
    assert abs(found.mm_per_px - 1.0 / px_per_mm) <= found.plus_minus
    assert found.plus_minus < 0.01 / px_per_mm
    assert found.rms_px < 0.1
    assert (found.corners, found.remarks) == (54, ())


def test_tilted_board_is_said_and_widens_the_interval() -> None:
    """Ten degrees off: the scale changes over the board, that is said, and the truth still lies within."""
    found = measure(board_picture(tilt_deg=10.0))
    assert 0.03 < found.change < 0.2
    assert "hold it square" in found.remarks[0]
    assert abs(found.mm_per_px - 0.25) <= found.plus_minus
    assert found.plus_minus > 3 * measure(board_picture()).plus_minus


def test_error_of_the_print_is_taken_in() -> None:
    """A board true to 1 % cannot give a scale better than 2 · 1 %/√3."""
    found = measure(board_picture(), board_error=0.01)
    assert found.plus_minus / found.mm_per_px == pytest.approx(2 * 0.01 / math.sqrt(3), rel=0.05)


def test_no_board_no_corners() -> None:
    """Noise, a dark picture and a board that is partly outside give nothing."""
    rng = np.random.default_rng(0)
    assert find_corners(rng.integers(0, 256, (120, 160), dtype=np.uint8), COLUMNS, ROWS) is None
    assert find_corners(np.zeros((120, 160), np.uint8), COLUMNS, ROWS) is None
    assert find_corners(board_picture()[:, 200:].copy(), COLUMNS, ROWS) is None


@given(
    length_px=st.floats(1.0, 1000.0),
    angle=st.floats(0.0, 2 * math.pi),
    distance_mm=st.floats(0.1, 5000.0),
    error_px=st.floats(0.0, 3.0),
)
def test_two_points(length_px: float, angle: float, distance_mm: float, error_px: float) -> None:
    """Scale is distance over length, its relative uncertainty 2·√2 point errors over the length."""
    other = (10.0 + length_px * math.cos(angle), 20.0 + length_px * math.sin(angle))
    found = scale_of_points((10.0, 20.0), other, distance_mm=distance_mm, point_error_px=error_px)
    assert found.mm_per_px == pytest.approx(distance_mm / length_px)
    assert found.plus_minus == pytest.approx(found.mm_per_px * 2 * math.sqrt(2) * error_px / length_px)


def test_two_points_uncertainty_against_simulation() -> None:
    """Marking errors drawn at random scatter the scale by half the expanded uncertainty."""
    rng = np.random.default_rng(4)
    draws = rng.normal(0.0, 0.5, (20_000, 2, 2)) + np.array([[100.0, 50.0], [300.0, 120.0]])
    scales = 150.0 / np.linalg.norm(draws[:, 1] - draws[:, 0], axis=1)
    said = scale_of_points((100.0, 50.0), (300.0, 120.0), distance_mm=150.0, point_error_px=0.5)
    assert said.plus_minus / 2 == pytest.approx(float(scales.std()), rel=0.03)


def test_fit_uncertainty_against_simulation() -> None:
    """Corners scattered by 0.3 px at random: the scale scatters as the fit says, and no tilt is made of noise."""
    rng = np.random.default_rng(5)
    grid = np.stack(np.meshgrid(np.arange(COLUMNS), np.arange(ROWS)), axis=-1).reshape(-1, 2) * 40.0
    found = [
        scale_of_board(grid + rng.normal(0.0, 0.3, grid.shape), COLUMNS, ROWS, square_mm=SQUARE_MM) for _ in range(200)
    ]
    scatter = float(np.std([one.mm_per_px for one in found]))
    inside = sum(abs(one.mm_per_px - 0.25) <= one.plus_minus for one in found)
    assert scatter < np.median([one.plus_minus for one in found]) / 2  # the homography takes some noise for tilt
    assert inside >= 190


@pytest.mark.parametrize(
    "arguments",
    [
        {"square_mm": 0.0},
        {"square_mm": math.nan},
        {"square_mm": 10.0, "board_error": -0.1},
        {"square_mm": 10.0, "board_error": 1.0},
    ],
)
def test_senseless_boards_are_refused(arguments: dict[str, float]) -> None:
    """Sizes and shares out of range are refused, and so are corners that are not a board's."""
    corners = np.zeros((COLUMNS * ROWS, 2))
    with pytest.raises(ValueError, match="square_mm"):
        scale_of_board(corners, COLUMNS, ROWS, **arguments)
    with pytest.raises(ValueError, match="corners_px"):
        scale_of_board(corners[:-1], COLUMNS, ROWS, square_mm=1.0)
    with pytest.raises(ValueError, match="columns"):
        find_corners(np.zeros((50, 50), np.uint8), 2, 6)
    with pytest.raises(ValueError, match="two different points"):
        scale_of_points((1.0, 1.0), (1.0, 1.0), distance_mm=5.0)
    with pytest.raises(ValueError, match="distance_mm"):
        scale_of_points((1.0, 1.0), (2.0, 1.0), distance_mm=-5.0)
