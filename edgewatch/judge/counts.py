"""Bursts counted along a track: Poisson, or overdispersed because bursts come in families.

``dispersion`` is variance over mean of the count, 1 for Poisson. Above 1 the counts are taken as negative binomial
with a shape proportional to the track (the compound Poisson law whose families have logarithmic sizes), so that counts
of stretches add up and the dispersion is the same for any length.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import betainc, gammaln, pdtr, pdtrc

NEARLY_POISSON = 1.0 + 1e-6
"""Below this dispersion the formulas for Poisson counts are used: the others lose digits."""

_NODES, _NODE_WEIGHTS = np.polynomial.hermite_e.hermegauss(21)
NORMAL_NODES: NDArray[np.float64] = _NODES
"""Nodes of Gauss-Hermite quadrature over a standard normal variable."""
NORMAL_WEIGHTS: NDArray[np.float64] = _NODE_WEIGHTS / _NODE_WEIGHTS.sum()
"""Their weights; they add up to 1."""


def tilt(ratio: float, dispersion: float) -> tuple[float, float]:
    """Exponent per burst and cost per expected burst of the best test against a hazard ``ratio`` times the null's.

    With theta = ln(r d / (1 + r (d - 1))) and kappa = ln((1 + r (d - 1)) / d) / (d - 1), exp(theta X - mean kappa)
    has expectation 1 for negative binomial counts X of that mean and dispersion d; theta solves kappa'(theta) = r,
    which makes the growth under the alternative largest (the exponential family's likelihood ratio; for d = 1 it is
    Wald's: theta = ln r, kappa = r - 1).
    """
    if not (ratio > 0.0 and dispersion >= 1.0):
        raise ValueError(f"ratio = {ratio!r}, dispersion = {dispersion!r}: out of range")
    if dispersion < NEARLY_POISSON:
        return math.log(ratio), ratio - 1.0
    extra = dispersion - 1.0
    spread = 1.0 + ratio * extra
    return math.log(ratio * dispersion / spread), math.log(spread / dispersion) / extra


def log_mass(count: ArrayLike, mean: ArrayLike, dispersion: float) -> NDArray[np.float64]:
    """Log probability of ``count`` at each mean; they broadcast."""
    count = np.asarray(count, dtype=np.float64)
    mean = np.maximum(np.asarray(mean, dtype=np.float64), 1e-12)
    if dispersion < NEARLY_POISSON:
        return np.asarray(count * np.log(mean) - mean - gammaln(count + 1.0))
    shape = mean / (dispersion - 1.0)
    return np.asarray(
        gammaln(count + shape)
        - gammaln(count + 1.0)
        - gammaln(shape)
        - shape * math.log(dispersion)
        + count * math.log1p(-1.0 / dispersion)
    )


def at_most(count: float, mean: ArrayLike, dispersion: float) -> NDArray[np.float64]:
    """P(X <= count) at each mean."""
    mean = np.maximum(np.asarray(mean, dtype=np.float64), 1e-12)
    if count < 0:
        return np.zeros_like(mean)
    if dispersion < NEARLY_POISSON:
        return np.asarray(pdtr(count, mean))
    return np.asarray(betainc(mean / (dispersion - 1.0), count + 1.0, 1.0 / dispersion))


def at_least(count: float, mean: ArrayLike, dispersion: float) -> NDArray[np.float64]:
    """P(X >= count) at each mean."""
    mean = np.maximum(np.asarray(mean, dtype=np.float64), 1e-12)
    if count <= 0:
        return np.ones_like(mean)
    if dispersion < NEARLY_POISSON:
        return np.asarray(pdtrc(count - 1.0, mean))
    return np.asarray(betainc(count, mean / (dispersion - 1.0), 1.0 - 1.0 / dispersion))
