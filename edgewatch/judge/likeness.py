"""How well a bar's figures agree with a taught grade, scatter from bar to bar included."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from edgewatch.figures.wear import HIGH_M_S, LOW_M_S, reach_at_speed
from edgewatch.judge.bands import Band
from edgewatch.judge.counts import NORMAL_NODES, NORMAL_WEIGHTS, log_mass

LEAST_SCATTER = 0.02
"""Scatter from bar to bar is never taken as less (2 %): no line repeats itself better."""

LARGEST_FACTOR = 1.4
"""Wear compensation stays within this: a wheel worn to two thirds asks for 1.27."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Evidence:
    """What a bar has shown: counts, and reach as seen in settled windows (NaN without) with the track it comes from.

    ``spark_m_s``: speed near the wheel, ``wheel_m_s``: surface speed as configured or ordered; NaN where not known.
    """

    bursts: int
    exposure_m: float
    reach_mm: float = math.nan
    reach_track_m: float = 0.0
    spark_m_s: float = math.nan
    wheel_m_s: float = math.nan


def wear_factor(band: Band, *, spark_m_s: float, wheel_m_s: float) -> float:
    """What a reach must be multiplied by to hold at the wheel speed at which the band was taught; 1 if not known.

    The sparks' own speed goes first: a configured surface speed stays behind when the wheel wears. Speeds that no
    grinding wheel has are not believed, and the factor is kept within what a wheel's whole life can ask for.
    """
    for taught, now in ((band.spark_speed_m_s, spark_m_s), (band.wheel_speed_m_s, wheel_m_s)):
        if LOW_M_S <= taught <= HIGH_M_S and LOW_M_S <= now <= HIGH_M_S:
            return min(max(reach_at_speed(1.0, now, taught), 1.0 / LARGEST_FACTOR), LARGEST_FACTOR)
    return 1.0


def reach_at_taught_speed(band: Band, evidence: Evidence) -> float:
    """The bar's reach as it would be at the speed of the teaching (mm; NaN without)."""
    return evidence.reach_mm * wear_factor(band, spark_m_s=evidence.spark_m_s, wheel_m_s=evidence.wheel_m_s)


def predictive_scatter(scatter: float | None, band: Band) -> float:
    """Scatter of the next bar about the taught centre, the uncertainty of the centre included."""
    known = scatter if scatter is not None and math.isfinite(scatter) else 0.0
    return max(known, LEAST_SCATTER) * math.sqrt(1.0 + 1.0 / max(band.bars_used, 5))


def log_rate_likelihood(band: Band, counts: ArrayLike, exposure_m: float) -> NDArray[np.float64]:
    """Log probability of each count of bursts from a bar of this grade, scatter included; shape of ``counts``.

    The hazard is log-normal from bar to bar; the integral over it is taken by Gauss-Hermite quadrature about its
    largest point (Naylor & Smith, Applied Statistics 31, 1982), which holds from no burst to millions.
    """
    counts = np.asarray(counts, dtype=np.float64)
    scatter = predictive_scatter(band.rate_scatter, band)
    mean, spread = band.rate_center_per_m * exposure_m, band.rate_dispersion
    # Newton's method in log hazard for the mode of Poisson likelihood times normal density; concave, so it converges
    z = np.log((counts + 0.5 * mean + 0.5) / (1.5 * mean + 0.5)) / scatter
    for _ in range(12):
        expected = mean * np.exp(scatter * z)
        z = z + (scatter * (counts - expected) / spread - z) / (scatter**2 * expected / spread + 1.0)
    width = 1.0 / np.sqrt(scatter**2 * mean * np.exp(scatter * z) / spread + 1.0)
    nodes = z[..., None] + width[..., None] * NORMAL_NODES
    terms = log_mass(counts[..., None], mean * np.exp(scatter * nodes), spread) - 0.5 * nodes**2 + 0.5 * NORMAL_NODES**2
    peak = terms.max(axis=-1)
    return np.asarray(np.log(width) + peak + np.log(np.exp(terms - peak[..., None]) @ NORMAL_WEIGHTS))


def reach_spread(band: Band, reach_track_m: float) -> float:
    """Deviation of the logarithm of a bar's reach from the grade's centre: scatter, and noise on so much track."""
    noise = band.reach_noise_mm2_m
    sampling = 0.0
    if noise is not None and math.isfinite(noise) and reach_track_m > 0.0 and band.reach_center_mm:
        sampling = noise / reach_track_m / band.reach_center_mm**2
    return math.sqrt(predictive_scatter(band.reach_scatter, band) ** 2 + sampling)


def reach_score(band: Band, evidence: Evidence) -> float:
    """Deviation of the bar's reach from the grade's, in standard deviations; NaN where there is none to compare."""
    if not (band.has_reach and band.reach_center_mm and evidence.reach_mm > 0.0):
        return math.nan
    return math.log(reach_at_taught_speed(band, evidence) / band.reach_center_mm) / reach_spread(
        band, evidence.reach_track_m
    )


def log_likelihood(band: Band, evidence: Evidence, *, use_reach: bool) -> float:
    """Log likelihood of the evidence under the grade."""
    total = float(log_rate_likelihood(band, evidence.bursts, evidence.exposure_m))
    if use_reach:
        total += -0.5 * reach_score(band, evidence) ** 2 - math.log(reach_spread(band, evidence.reach_track_m))
    return total


def nearest(bands: Sequence[Band], evidence: Evidence) -> tuple[tuple[str, float], ...]:
    """Taught grades with their weights (posterior of equal priors), the likeliest first; empty without track."""
    if not bands or not evidence.exposure_m > 0.0:
        return ()
    use_reach = evidence.reach_mm > 0.0 and all(band.has_reach and band.reach_center_mm for band in bands)
    logs = np.array([log_likelihood(band, evidence, use_reach=use_reach) for band in bands])
    weights = np.exp(logs - logs.max())
    weights /= weights.sum()
    order = np.argsort(-weights, kind="stable")
    return tuple((bands[at].grade, float(weights[at])) for at in order)
