"""Overdispersed counts against a published data set and scipy's distributions."""

import numpy as np
import pytest
from scipy import stats

from edgewatch.judge.counts import at_least, at_most, log_mass, tilt

MITES = [70, 38, 17, 10, 9, 3, 2, 1]
"""Bliss & Fisher, Biometrics 9 (1953): leaves with 0, 1, 2, … mites; maximum likelihood gives k = 1.02459."""


def log_likelihood(mean: float, dispersion: float) -> float:
    """Of the mites."""
    return sum(leaves * float(log_mass(count, mean, dispersion)) for count, leaves in enumerate(MITES))


def test_mites_prefer_the_negative_binomial_and_its_published_shape() -> None:
    """Shape 1.0246 at the mean 1.146667 is the best; log likelihood -222.437 against -242.810 for Poisson."""
    mean = sum(count * leaves for count, leaves in enumerate(MITES)) / sum(MITES)
    assert log_likelihood(mean, 1.0) == pytest.approx(-242.809941, abs=1e-6)
    shapes = np.linspace(0.9, 1.2, 301)
    best = shapes[int(np.argmax([log_likelihood(mean, 1.0 + mean / shape) for shape in shapes]))]
    assert best == pytest.approx(1.024592, abs=0.001)
    assert log_likelihood(mean, 1.0 + mean / 1.024592) == pytest.approx(-222.437154, abs=1e-6)


@pytest.mark.parametrize("dispersion", [1.0, 1.3, 4.0])
@pytest.mark.parametrize("mean", [0.4, 12.0, 300.0])
def test_tails_are_those_of_scipy(mean: float, dispersion: float) -> None:
    """Mass and both tails, Poisson and negative binomial."""
    law = stats.poisson(mean) if dispersion == 1.0 else stats.nbinom(mean / (dispersion - 1.0), 1.0 / dispersion)
    for count in (0, 1, 5, 20, 280):
        assert float(log_mass(count, mean, dispersion)) == pytest.approx(law.logpmf(count), rel=1e-9, abs=1e-9)
        assert float(at_most(count, mean, dispersion)) == pytest.approx(law.cdf(count), rel=1e-9, abs=1e-300)
        assert float(at_least(count, mean, dispersion)) == pytest.approx(law.sf(count - 1), rel=1e-8, abs=1e-300)


@pytest.mark.parametrize("ratio", [0.1, 0.6, 1.7, 5.0])
@pytest.mark.parametrize("dispersion", [1.0, 1.4, 3.0])
def test_tilted_expectation_is_one(ratio: float, dispersion: float) -> None:
    """exp(theta X - kappa mean) has expectation 1, summed over scipy's probabilities: what the risk rests on."""
    mean = 3.0
    theta, kappa = tilt(ratio, dispersion)
    law = stats.poisson(mean) if dispersion == 1.0 else stats.nbinom(mean / (dispersion - 1.0), 1.0 / dispersion)
    counts = np.arange(3000)
    expectation = float(np.exp(law.logpmf(counts) + theta * counts - kappa * mean).sum())
    assert expectation == pytest.approx(1.0, abs=1e-9)
