"""Share of bursts among a stream's candidates: what it does to the log odds, and how fast."""

from __future__ import annotations

import numpy as np
import pytest

from edgewatch.sight.share import MEMORY_S, MOST_SHIFT, BurstShare

USUAL = 0.1
PERIOD_S = 0.005


def _look(share: BurstShare, odds: np.ndarray, pictures: int) -> None:
    """Pictures with candidates of these log odds, corrected as the sight does."""
    for _ in range(pictures):
        sure = 1.0 / (1.0 + np.exp(-odds - share.shift))
        share.learn(float(sure.sum()), USUAL * len(odds), len(odds))


def _odds(truth: float, rng: np.random.Generator, count: int = 4000) -> np.ndarray:
    """Log odds that a net taught on the usual share gives when ``truth`` of the candidates are bursts: two normal
    distributions of one width, whose log ratio is linear."""
    burst = rng.uniform(size=count) < truth
    seen = rng.normal(np.where(burst, 2.0, -2.0), 1.6)
    return 4.0 / 1.6**2 * seen + np.log(USUAL / (1.0 - USUAL))


def test_share_of_a_stream_with_few_bursts_is_found() -> None:
    """The shift becomes the difference of the log odds of the true and the usual share: Saerens et al. 2002."""
    truth = 0.07
    share = BurstShare(period_s=PERIOD_S)
    assert share.shift == 0.0
    _look(share, _odds(truth, np.random.default_rng(61)), 400)
    ideal = np.log(truth / (1 - truth)) - np.log(USUAL / (1 - USUAL))
    assert share.shift == pytest.approx(ideal, abs=0.12)


def test_shift_is_limited_and_never_upwards() -> None:
    """Hardly any burst lowers the odds by the limit at most; many leave them as they are."""
    rng = np.random.default_rng(62)
    few, many = BurstShare(period_s=PERIOD_S), BurstShare(period_s=PERIOD_S)
    _look(few, _odds(0.001, rng), 400)
    _look(many, _odds(0.4, rng), 400)
    assert few.shift == -MOST_SHIFT
    assert many.shift == 0.0


def test_a_few_candidates_say_little_and_another_bar_is_followed() -> None:
    """Ten dull candidates do not move the odds by a tenth; after a quiet bar a lively one is itself within a memory."""
    share = BurstShare(period_s=PERIOD_S)
    share.learn(0.1, 10 * USUAL, 10)
    assert -0.1 < share.shift < 0.0
    rng = np.random.default_rng(63)
    _look(share, _odds(0.001, rng, 100), 400)
    assert share.shift == -MOST_SHIFT
    _look(share, _odds(0.15, rng, 100), int(MEMORY_S / PERIOD_S))
    assert share.shift > -0.2


def test_pictures_without_candidates_are_harmless() -> None:
    """Nothing seen, nothing learnt, however long."""
    share = BurstShare(period_s=PERIOD_S)
    for _ in range(3):
        share.learn(0.0, 0.0, 0)
    assert share.shift == 0.0
