"""Which grades can be told apart, and when."""

import dataclasses
import math

import numpy as np
import pytest

from edgewatch.judge.bands import Band
from edgewatch.judge.contrast import OWN_SHARE, compare, contrast
from edgewatch.judge.likeness import Evidence, nearest
from edgewatch.judge.separation import excluded
from tests.bench.bench_judge import counts


def band(
    grade: str, center: float, *, scatter: float = 0.1, dispersion: float = 1.0, reach: float | None = None
) -> Band:
    """A taught band of this centre and scatter."""
    half = math.exp(3.6 * scatter)
    return Band(
        grade=grade,
        burst_rate_low_per_m=center / half,
        burst_rate_high_per_m=center * half,
        rate_center_per_m=center,
        rate_scatter=scatter,
        rate_dispersion=dispersion,
        bars_used=20,
        reach_low_mm=None if reach is None else reach * 0.85,
        reach_high_mm=None if reach is None else reach * 1.18,
        reach_center_mm=reach,
        reach_scatter=None if reach is None else 0.04,
        reach_noise_mm2_m=None if reach is None else 20_000.0,
    )


def test_far_grades_need_less_time_than_near_ones() -> None:
    """The further apart, the sooner; the stream's strength scales the time, not the track."""
    far = compare(band("a", 0.45), band("b", 2.2), miss=0.01, track_m_s=100.0)
    near = compare(band("a", 0.45), band("b", 0.9), miss=0.01, track_m_s=100.0)
    weak = compare(band("a", 0.45), band("b", 0.9), miss=0.01, track_m_s=10.0)
    assert far.told_apart and near.told_apart
    assert far.track_m < near.track_m
    assert weak.track_m == near.track_m
    assert weak.seconds == pytest.approx(10.0 * near.seconds)
    assert far.alert_seconds < near.alert_seconds


def test_grades_that_overlap_are_said_not_to_be_told_apart() -> None:
    """Scatter that no contact time helps against."""
    pair = compare(band("a", 0.45, scatter=0.2), band("b", 0.6, scatter=0.2), miss=0.01, track_m_s=100.0)
    assert not pair.told_apart
    assert math.isinf(pair.seconds) and math.isinf(pair.alert_seconds)
    assert pair.limit_share < OWN_SHARE


def test_reach_tells_apart_where_bursts_do_not() -> None:
    """Two grades of the same hazard and different reach."""
    pair = compare(band("a", 0.45, reach=400.0), band("b", 0.46, reach=600.0), miss=0.01, track_m_s=100.0)
    assert pair.told_apart
    assert pair.by == "reach"


def test_every_ordered_pair() -> None:
    """Three grades, six pairs."""
    bands = [band(name, rate) for name, rate in (("a", 0.1), ("b", 0.5), ("c", 2.0))]
    pairs = contrast(bands, miss=0.01, track_m_s=50.0)
    assert {(pair.expected, pair.actual) for pair in pairs} == {
        (one, other) for one in "abc" for other in "abc" if one != other
    }
    with pytest.raises(ValueError, match="track_m_s"):
        contrast(bands, miss=0.01, track_m_s=0.0)


@pytest.mark.parametrize("dispersion", [1.0, 1.6])
@pytest.mark.parametrize(("expected", "actual"), [(0.45, 0.9), (0.9, 0.45), (0.08, 0.45)])
def test_track_stated_is_the_track_needed(expected: float, actual: float, dispersion: float) -> None:
    """Simulated bars after the track that contrast states: 95 % of own bars exclude the other grade, and at most the
    promised share of the other's bars does not look foreign.
    """
    own, other = (
        band("own", expected, dispersion=dispersion),
        band("other", actual, dispersion=dispersion),
    )
    pair = compare(own, other, miss=0.01, track_m_s=1.0)
    rng = np.random.default_rng(6)
    # the predictive scatter includes the uncertainty of a centre taught from 20 bars
    spread = 0.1 * math.sqrt(1.0 + 1.0 / 20.0)

    def share(center: float, bars: int) -> float:
        rates = center * np.exp(rng.normal(0.0, spread, bars))
        drawn = counts(rng, rates * pair.track_m, dispersion)
        known = {
            count: excluded(other, own, Evidence(bursts=int(count), exposure_m=pair.track_m), miss=0.01)
            for count in np.unique(drawn)
        }
        return float(np.mean([known[count] for count in drawn]))

    assert share(expected, 4000) == pytest.approx(0.95, abs=0.035)  # counts are whole numbers
    assert share(actual, 20_000) <= 0.01 + 3.0 * math.sqrt(0.01 / 20_000)


def test_alert_track_is_about_the_mean_track_to_the_alert() -> None:
    """The quick formula of contrast against simulated bars of the typical foreign hazard."""
    own, other = band("own", 0.45), band("other", 1.5)
    pair = compare(own, other, miss=0.01, track_m_s=1.0)
    from edgewatch.judge.evidence import RateEvidence

    evidence = RateEvidence(own)
    rng = np.random.default_rng(7)
    tracks = []
    for _ in range(400):
        bursts = track = 0.0
        while True:
            track += 0.5
            bursts += rng.poisson(0.75)
            if max(evidence.sides(bursts, track)) >= math.log(1000.0):
                break
        tracks.append(track)
    assert np.mean(tracks) == pytest.approx(pair.alert_track_m, rel=0.2)


def test_nearest_weights() -> None:
    """The grade that fits best comes first; equal grades share; nothing seen, nothing named."""
    bands = [band("a", 0.1), band("b", 0.5), band("c", 2.0)]
    found = nearest(bands, Evidence(bursts=52, exposure_m=100.0))
    assert found[0][0] == "b"
    twins = [band("x", 0.5), band("y", 0.5)]
    assert [weight for _, weight in nearest(twins, Evidence(bursts=52, exposure_m=100.0))] == pytest.approx([0.5, 0.5])
    assert nearest(bands, Evidence(bursts=0, exposure_m=0.0)) == ()
    assert nearest([], Evidence(bursts=3, exposure_m=5.0)) == ()


def test_nearest_uses_reach_where_all_bands_hold_it() -> None:
    """Two grades of one hazard, told by reach; if one band has none, reach is left aside."""
    one, other = band("a", 0.45, reach=400.0), band("b", 0.45, reach=600.0)
    seen = Evidence(bursts=45, exposure_m=100.0, reach_mm=590.0, reach_track_m=80.0)
    assert nearest([one, other], seen)[0][0] == "b"
    assert nearest([one, other], seen)[0][1] > 0.99
    assert dict(nearest([one, band("b", 0.45)], seen))["a"] == pytest.approx(0.5)


def test_worn_wheel_does_not_mislead_the_nearest_grade() -> None:
    """Reach is compared at the taught speed."""
    one, other = (
        dataclasses.replace(band(grade, 0.45, reach=reach), spark_speed_m_s=20.0)
        for grade, reach in (("a", 480.0), ("b", 600.0))
    )
    slow = Evidence(
        bursts=45, exposure_m=100.0, reach_mm=600.0 * (14.0 / 20.0) ** 0.58, reach_track_m=80.0, spark_m_s=14.0
    )
    assert nearest([one, other], slow)[0][0] == "b"
    assert nearest([one, other], dataclasses.replace(slow, spark_m_s=math.nan))[0][0] == "a"
