"""The rules by which detections are held against truth."""

from __future__ import annotations

import numpy as np

from tests.scoring import match_bursts, match_streaks


def test_as_many_pairs_as_there_can_be() -> None:
    """A line that fits two streaks goes to the one that nothing else fits, even if it lies better on the other."""
    truth = np.array([[0.0, 0.0, 100.0, 0.0], [30.0, 1.0, 130.0, 1.0]])
    seen = np.array([[15.0, 0.0, 120.0, 0.0], [60.0, 1.0, 140.0, 1.0]])
    assert sorted(match_streaks(truth, seen)) == [(0, 0), (1, 1)]
    points = np.array([[0.0, 0.0], [10.0, 0.0]])
    assert sorted(match_bursts(points, np.array([[9.0, 0.0], [20.0, 0.0]]))) == [(0, 0), (1, 1)]


def test_pairs_are_one_to_one_and_none_is_made_up() -> None:
    """Two lines on one streak are one found and one too many; what is far from everything pairs with nothing."""
    truth = np.array([[0.0, 0.0, 100.0, 0.0]])
    assert match_streaks(truth, np.array([[0.0, 0.0, 90.0, 0.0], [2.0, 0.0, 99.0, 0.0]])) == [(0, 1)]
    assert match_streaks(truth, np.array([[0.0, 30.0, 100.0, 30.0]])) == []
    assert match_streaks(truth, np.array([[0.0, 0.0, 40.0, 0.0]])) == []
    assert match_bursts(np.zeros((0, 2)), np.zeros((3, 2))) == []
