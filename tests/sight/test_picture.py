"""Regions and bins keep pixels and millimetres right."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from edgewatch.sight.optics import Optics
from edgewatch.sight.picture import reduce_picture


def test_nothing_to_do_returns_the_picture_itself() -> None:
    """No copy where none is needed."""
    picture = np.zeros((40, 60), np.uint8)
    assert reduce_picture(picture) is picture


@given(st.integers(1, 5), st.integers(0, 9), st.integers(0, 9), st.integers(16, 40), st.integers(16, 40))
def test_reduced_pixel_is_the_mean_of_its_parts(binning: int, x: int, y: int, width: int, height: int) -> None:
    """Against plain numpy; OpenCV rounds the mean to the nearest whole."""
    picture = np.random.default_rng(binning + x).integers(0, 256, (50, 50)).astype(np.uint8)
    reduced = reduce_picture(picture, (x, y, width, height), binning)
    down, across = height // binning, width // binning
    part = picture[y : y + down * binning, x : x + across * binning].astype(float)
    mean = part.reshape(down, binning, across, binning).mean(axis=(1, 3))
    assert reduced.shape == (down, across)
    assert np.abs(reduced - mean).max() <= 0.51


def test_a_spot_keeps_its_place_in_millimetres() -> None:
    """Optics of the region and the bins put a bright spot where it was."""
    optics = Optics(
        width_px=200, height_px=100, mm_per_px=0.5, contact_px=(10, 50), direction_deg=0, exposure_ms=1, fps=100
    )
    picture = np.zeros((100, 200), np.uint8)
    picture[48:52, 120:124] = 255
    reduced = reduce_picture(picture, (20, 8, 160, 80), 4)
    rows, columns = np.nonzero(reduced)
    small = optics.cropped(20, 8, 160, 80).binned(4)
    before = optics.along_mm(np.array([121.5, 49.5]))
    after = small.along_mm(np.array([columns.mean(), rows.mean()]))
    assert after == pytest.approx(float(before), abs=1e-9)
    assert (small.width_px, small.height_px) == reduced.shape[::-1]


@pytest.mark.parametrize("region", [(0, 0, 61, 10), (-1, 0, 10, 10), (0, 35, 10, 10), (0, 0, 0, 10)])
def test_a_region_beyond_the_picture_is_refused(region: tuple[int, int, int, int]) -> None:
    """Named with its numbers."""
    with pytest.raises(ValueError, match="reaches beyond the picture of 60 x 40 px"):
        reduce_picture(np.zeros((40, 60), np.uint8), region)


@pytest.mark.parametrize("binning", [0, -2, 41])
def test_bins_that_leave_nothing_are_refused(binning: int) -> None:
    """At least one pixel must be left."""
    with pytest.raises(ValueError, match="binning"):
        reduce_picture(np.zeros((40, 60), np.uint8), None, binning)
