"""Tolerance factors, distribution-free sample sizes and outlier tests against published tables."""

import numpy as np
import pytest

from edgewatch.judge.tolerance import esd_outliers, least_sample, two_sided_factor

TWO_SIDED = [
    (4, 0.95, 0.95, 6.34),
    (5, 0.90, 0.95, 4.29),
    (5, 0.99, 0.95, 6.60),
    (10, 0.90, 0.95, 2.86),
    (10, 0.95, 0.95, 3.39),
    (10, 0.99, 0.95, 4.44),
    (20, 0.95, 0.95, 2.76),
    (20, 0.99, 0.95, 3.62),
    (30, 0.99, 0.95, 3.35),
]
"""Berthouex & Brown, Statistics for Environmental Engineers, Table 21.1: n, content, confidence, factor."""
EXACT = [
    (5, 0.99, 0.95, 6.5980),
    (10, 0.95, 0.95, 3.3934),
    (10, 0.95, 0.99, 4.2942),
    (20, 0.99, 0.95, 3.6210),
    (50, 0.99, 0.95, 3.1288),
    (100, 0.90, 0.99, 1.9783),
    (43, 0.90, 0.99, 2.2228252),
]
"""ISO 16269-6 style exact factors (unknown mean and deviation), by numerical integration with another program; the last
is the NIST/SEMATECH 7.2.6.3 example, for which Howe's approximation gives 2.217."""
WILKS = [
    (0.90, 0.90, 1, 22),
    (0.90, 0.90, 2, 38),
    (0.95, 0.90, 2, 46),
    (0.95, 0.95, 1, 59),
    (0.95, 0.95, 2, 93),
    (0.95, 0.99, 2, 473),
    (0.99, 0.99, 1, 459),
]
"""Wilks (1941): confidence, content, rank, sample size; the classical published ones."""
ROSNER = [
    -0.25, 0.68, 0.94, 1.15, 1.20, 1.26, 1.26, 1.34, 1.38, 1.43, 1.49, 1.49, 1.55, 1.56, 1.58, 1.65, 1.69, 1.70,
    1.76, 1.77, 1.81, 1.91, 1.94, 1.96, 1.99, 2.06, 2.09, 2.10, 2.14, 2.15, 2.23, 2.24, 2.26, 2.35, 2.37, 2.40,
    2.47, 2.54, 2.62, 2.64, 2.90, 2.92, 2.92, 2.93, 3.21, 3.26, 3.30, 3.59, 3.68, 4.30, 4.64, 5.34, 5.42, 6.01,
]  # fmt: skip
"""Rosner, Technometrics 25 (1983), as in NIST/SEMATECH 1.3.5.17.3 (recalled from memory): three outliers at 5 %."""


@pytest.mark.parametrize(("count", "content", "confidence", "factor"), TWO_SIDED)
def test_table(count: int, content: float, confidence: float, factor: float) -> None:
    """The printed table, to its two decimals."""
    assert two_sided_factor(count, content, confidence) == pytest.approx(factor, abs=0.0085)


@pytest.mark.parametrize(("count", "content", "confidence", "factor"), EXACT)
def test_exact_factors(count: int, content: float, confidence: float, factor: float) -> None:
    """Exact factors to the accuracy claimed, 0.1 %."""
    assert two_sided_factor(count, content, confidence) == pytest.approx(factor, rel=1e-3)


@pytest.mark.parametrize(("confidence", "content", "rank", "size"), WILKS)
def test_sample_sizes(confidence: float, content: float, rank: int, size: int) -> None:
    """Distribution-free sample sizes."""
    assert least_sample(content, confidence, rank=rank) == size


def test_generalised_esd_on_its_published_example() -> None:
    """54 values, up to ten outliers looked for: exactly the three largest are named (6.01, 5.42, 5.34)."""
    found = esd_outliers(np.array(ROSNER), most=10, level=0.05)
    assert [ROSNER[place] for place in found] == [6.01, 5.42, 5.34]
