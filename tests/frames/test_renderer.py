"""The pictures of a rehearsal, drawn when asked for; the program around it is tested in ``test_apart``."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest

from edgewatch.frames.renderer import Renderer, count_frames, plan_line
from tests.frames.test_contract import STATION


@pytest.mark.parametrize("fps", [0.3, 12.0, 30.0, 99.9, 100.0, 1000.0])
@pytest.mark.parametrize("seed", [1, 2, 3])
def test_the_last_frame_begins_before_the_end_of_the_line(fps: float, seed: int) -> None:
    """And the next would not."""
    own = dataclasses.replace(STATION.rehearsal, seed=seed)
    line, _ = plan_line(dataclasses.replace(STATION, rehearsal=own))
    count = count_frames(line, fps)
    assert (count - 1) / fps < line.end_s <= count / fps


def test_a_line_that_ends_on_a_frame_does_not_show_it() -> None:
    """The exposure that would begin at the end belongs to nobody."""
    line, _ = plan_line(STATION)
    assert count_frames(line, 7 / line.end_s) == 7


def test_it_draws_every_picture_once_and_ends() -> None:
    """As many as the line has, numbered from 0."""
    renderer = Renderer(STATION)
    line, _ = plan_line(STATION)
    indices = []
    while (taken := renderer.take()) is not None:
        indices.append(taken[0])
    assert indices == list(range(count_frames(line, STATION.optics.fps)))
    assert renderer.take() is None


def test_pictures_passed_over_are_not_drawn() -> None:
    """It goes on from where it is told, never back."""
    renderer, other = Renderer(STATION), Renderer(STATION)
    renderer.go_on_from(5)
    renderer.go_on_from(3)
    first, straight = renderer.take(), other.take()
    assert first is not None and straight is not None
    assert (first[0], straight[0]) == (5, 0)
    assert first[1].shape == straight[1].shape
    assert not np.array_equal(first[1], straight[1])
