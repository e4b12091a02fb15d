"""Where the streaks come from: a picture that stands elsewhere is told from one that does not."""

from __future__ import annotations

import math

import numpy as np
import pytest
from numpy.typing import NDArray

from edgewatch.sight.optics import Optics
from edgewatch.sight.steadiness import LEAST_LINES, read_origin


def optics(direction_deg: float = 0.0) -> Optics:
    """A stream through the middle of the picture."""
    return Optics(
        width_px=640,
        height_px=400,
        mm_per_px=1.5,
        contact_px=(320.0, 200.0),
        direction_deg=direction_deg,
        exposure_ms=2.5,
        fps=100.0,
    )


def fan(rng: np.random.Generator, o: Optics, number: int = 60) -> NDArray[np.float64]:
    """Streaks that leave the contact in a narrow fan, each end misread by a third of a pixel."""
    turn = np.radians(o.direction_deg + rng.normal(0.0, 6.0, number))
    unit = np.stack([np.cos(turn), np.sin(turn)], axis=1)
    near = rng.uniform(5.0, 250.0, number)[:, None]
    ends = [np.asarray(o.contact_px) + at * unit + rng.normal(0.0, 0.3, (number, 2)) for at in (near, near + 40.0)]
    return np.concatenate(ends, axis=1)


@pytest.mark.parametrize("direction_deg", [0.0, 90.0, 180.0, -37.0])
def test_a_shift_across_the_stream_is_read_and_one_along_it_is_not(direction_deg: float) -> None:
    """Whatever the direction: to a few standard errors, over many pictures."""
    rng, o = np.random.default_rng(3), optics(direction_deg)
    ax, ay = o.axis
    for across, along in ((0.0, 0.0), (4.0, 0.0), (-7.0, 0.0), (0.0, 6.0)):
        shift = np.array([along * ax - across * ay, along * ay + across * ax])
        read = np.array([read_origin(fan(rng, o) + np.tile(shift, 2), o) for _ in range(100)])
        assert np.median(read[:, 0]) == pytest.approx(across, abs=0.15)


def test_the_error_is_the_scatter_of_a_steady_camera() -> None:
    """The standard error that each picture gives is the deviation that many pictures show."""
    rng, o = np.random.default_rng(4), optics()
    read = np.array([read_origin(fan(rng, o), o) for _ in range(400)])
    assert read[:, 0].std() == pytest.approx(math.sqrt(np.mean(read[:, 1] ** 2)), rel=0.25)


def test_strays_do_not_move_it() -> None:
    """A third of the lines from anywhere in any direction moves the origin by less than half a pixel."""
    rng, o = np.random.default_rng(5), optics()
    strays = rng.uniform(0.0, 400.0, (30, 4))
    both = np.concatenate([fan(rng, o), strays])
    assert read_origin(both, o)[0] == pytest.approx(0.0, abs=0.5)


def test_too_few_lines_say_nothing() -> None:
    """No streaks, and one fewer than needed; a streak of no length is no division by zero."""
    rng, o = np.random.default_rng(6), optics()
    for lines in (np.zeros((0, 4)), fan(rng, o, LEAST_LINES - 1), np.full((20, 4), 330.0)):
        assert all(math.isnan(value) for value in read_origin(lines, o))
    assert all(math.isfinite(value) for value in read_origin(fan(rng, o, 200), o))
