"""Decoded pictures become 8-bit mono."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray

from edgewatch.frames.mono import make_mono

GREYS = np.arange(256, dtype=np.uint8).reshape(16, 16)


@pytest.mark.parametrize("channels", [1, 3, 4])
def test_grey_survives_unchanged(channels: int) -> None:
    """Equal channels give exactly their value."""
    picture = np.repeat(GREYS[:, :, None], channels, axis=2)
    assert np.array_equal(make_mono(picture), GREYS)


def test_sixteen_bits_keep_the_upper_eight() -> None:
    """16-bit pictures are scaled by a shift."""
    assert np.array_equal(make_mono(GREYS.astype(np.uint16) * 256 + 255), GREYS)


def test_colour_is_weighed_as_in_bt601() -> None:
    """Pure blue, green and red weigh 0.114, 0.587, 0.299 (ITU-R BT.601)."""
    picture = np.zeros((1, 3, 3), np.uint8)
    picture[0, range(3), range(3)] = 255
    assert np.allclose(make_mono(picture)[0], [29.07, 149.685, 76.245], atol=0.51)


@pytest.mark.parametrize("picture", [np.zeros((4, 4), np.float32), np.zeros((4, 4, 2), np.uint8)])
def test_other_layouts_are_refused(picture: NDArray[np.uint8]) -> None:
    """Floating point and two-channel pictures are refused."""
    with pytest.raises(ValueError, match=r"picture|pixels"):
        make_mono(picture)
