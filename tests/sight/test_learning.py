"""What the weights are learnt from: a few scenes of it, so that the learners go on working."""

from __future__ import annotations

import numpy as np
import pytest

from edgewatch.sight import burst_weights, lone_weights
from tests.bench import learn_bursts, learn_streaks


@pytest.mark.parametrize("kind", ["r", "m"])
def test_lines_for_the_judge_of_lone_steps(kind: str) -> None:
    """Marks of every line with one end seen, as many as the weights take, and some of the lines are streaks."""
    marks, right = learn_streaks.collect(kind, range(30_000, 30_002))
    assert marks.shape == (len(right), lone_weights.HIDDEN.shape[0])
    assert np.isfinite(marks).all()
    assert 0 < right.sum() < len(right)


@pytest.mark.parametrize("kind", ["r", "m", "x", "d"])
def test_candidates_for_the_burst_net(kind: str) -> None:
    """Descriptions that fit the weights; bursts where the truth has some, and each is to be moved where it burst."""
    found = learn_bursts.collect(kind, range(40_000, 40_003))
    sieve = [burst_weights.SIFT, burst_weights.SIFT_BIAS, burst_weights.SIFTED, burst_weights.SIFTED_BIAS]
    passed = learn_bursts.collect(kind, range(40_000, 40_003), sieve)
    assert 0 < len(passed.right) < len(found.right)
    assert learn_bursts.rough(found.patches).shape[1] == burst_weights.SIFT.shape[0]
    assert found.right.any() == (kind in "rm")
    if found.right.any():
        away = np.hypot(*found.shift[found.right].T)
        assert np.median(away) < learn_bursts.RIGHT_PX
        assert away.max() < 60.0
