"""Reference bars -> band; outliers; verification with master bars."""

import dataclasses
import math

import numpy as np
import pytest

from edgewatch.errors import SettingsError
from edgewatch.judge.teaching import find_outliers, reference_bar, remarks, teach
from edgewatch.judge.tolerance import half_width, two_sided_factor
from edgewatch.judge.verification import verify
from tests.bench.bench_judge import OPTICS, Population, draw, figures_of, reference, taught, whole, window


def bars_of(population: Population, count: int, seed: int = 1) -> list:
    """Reference bars of a population."""
    rng = np.random.default_rng(seed)
    return [reference(number + 1, draw(population, rng)) for number in range(count)]


STRONG = Population(windows=40)


def test_band_holds_the_centre_and_widens_with_scatter() -> None:
    """The centre is found, the band encloses it, more scatter makes it wider, more bars narrower."""
    calm = teach("g", bars_of(dataclasses.replace(STRONG, scatter=0.05), 20), optics=OPTICS)
    wild = teach("g", bars_of(dataclasses.replace(STRONG, scatter=0.25), 20), optics=OPTICS)
    many = teach("g", bars_of(dataclasses.replace(STRONG, scatter=0.25), 80), optics=OPTICS)
    assert calm.rate_center_per_m == pytest.approx(0.45, rel=0.05)
    assert calm.burst_rate_low_per_m < 0.45 < calm.burst_rate_high_per_m
    assert wild.burst_rate_high_per_m > calm.burst_rate_high_per_m
    assert many.rate_scatter == pytest.approx(0.25, rel=0.3)

    def width(band):
        return math.log(band.burst_rate_high_per_m / band.burst_rate_low_per_m)

    assert width(many) < width(wild)
    assert width(many) > 2 * 2.5 * 0.25  # 99 % of a normal lies within 2.58 deviations


def test_sampling_noise_is_taken_out() -> None:
    """Short bars of a population hardly scattered: the band is a third narrower than their counts scatter."""
    bars = bars_of(Population(scatter=0.02, windows=4, dispersion=1.0), 40)
    rates = np.log([bar.bursts / bar.exposure_m for bar in bars])
    band = teach("g", bars, optics=OPTICS)
    half = math.log(band.burst_rate_high_per_m / band.burst_rate_low_per_m) / 2.0
    assert half < 0.67 * two_sided_factor(40, 0.99, 0.95) * rates.std(ddof=1)


def test_half_width_without_noise_is_the_classical_one() -> None:
    """And noise only ever narrows it, down to the error of the mean."""
    classical = half_width(variance=0.04, noise=0.0, count=12, content=0.99, confidence=0.95)
    assert classical == pytest.approx(0.2 * two_sided_factor(12, 0.99, 0.95))
    noisy = [half_width(variance=0.04, noise=n, count=12, content=0.99, confidence=0.95) for n in (0.01, 0.03, 0.1)]
    assert classical > noisy[0] > noisy[1]
    assert noisy[2] > 0.05
    with pytest.raises(ValueError, match="out of range"):
        half_width(variance=-1.0, noise=0.0, count=12, content=0.99, confidence=0.95)


def test_dispersion_is_found() -> None:
    """Families of bursts: variance over mean within bars."""
    band = teach("g", bars_of(dataclasses.replace(STRONG, dispersion=2.5), 20), optics=OPTICS)
    assert band.rate_dispersion == pytest.approx(2.5, rel=0.2)
    poisson = teach("g", bars_of(dataclasses.replace(STRONG, dispersion=1.0), 20), optics=OPTICS)
    assert 1.0 <= poisson.rate_dispersion < 1.15


def test_fewer_than_five_bars_are_refused_and_fewer_than_twenty_said() -> None:
    """Five are enough, at a price."""
    with pytest.raises(SettingsError, match="4 reference bars: at least 5"):
        teach("g", bars_of(STRONG, 4), optics=OPTICS)
    assert any("5 reference bars" in said for said in remarks(teach("g", bars_of(STRONG, 5), optics=OPTICS)))
    assert not any("or more" in said for said in remarks(teach("g", bars_of(STRONG, 20), optics=OPTICS)))


def test_a_wrong_bar_is_named_and_can_be_left_out() -> None:
    """The classic mistake: one bar of another grade among the references."""
    bars = bars_of(STRONG, 19)
    wrong = reference(20, draw(dataclasses.replace(STRONG, hazard_per_m=1.2), np.random.default_rng(9)))
    found = find_outliers([*bars, wrong])
    assert [(one.number, one.figure) for one in found] == [(20, "burst_rate")]
    spoilt = teach("g", [*bars, wrong], optics=OPTICS)
    mended = teach("g", [*bars, wrong], optics=OPTICS, left_out=[20])
    clean = teach("g", bars, optics=OPTICS)
    assert any("--leave-out 20" in said for said in remarks(spoilt))
    assert mended.burst_rate_high_per_m == pytest.approx(clean.burst_rate_high_per_m)
    assert spoilt.burst_rate_high_per_m > 1.2 * clean.burst_rate_high_per_m
    assert mended.bars[19].left_out
    assert (mended.bars_used, len(mended.bars)) == (19, 20)


def test_leaving_out_what_is_not_there() -> None:
    """A number that no bar has."""
    with pytest.raises(SettingsError, match="leave-out 31: no such bar; bars are 1 to 20"):
        teach("g", bars_of(STRONG, 20), optics=OPTICS, left_out=[31])


def test_bars_can_be_added() -> None:
    """Teaching in two goes is teaching at once."""
    bars = bars_of(STRONG, 24)
    first = teach("g", bars[:12], optics=OPTICS)
    assert teach("g", [*first.bars, *bars[12:]], optics=OPTICS) == teach("g", bars, optics=OPTICS)


def test_cut_streams_hold_no_reach() -> None:
    """A few cut bars are passed over, many leave the band without reach."""
    bars = bars_of(STRONG, 20)
    cut = [dataclasses.replace(bar, reach_mm=math.nan, cut_share=0.1) for bar in bars]
    assert teach("g", [*bars[:19], cut[19]], optics=OPTICS).has_reach
    band = teach("g", [*bars[:15], *cut[15:]], optics=OPTICS)
    assert not band.has_reach
    assert any("no reach" in said for said in remarks(band))


def test_bars_without_a_single_burst() -> None:
    """A grade that does not burst: the band starts at 0 and has an upper limit that the track allows."""
    bars = [dataclasses.replace(bar, bursts=0, rate_misfit=0.0, rate_freedom=0) for bar in bars_of(STRONG, 20)]
    band = teach("g", bars, optics=OPTICS)
    assert band.burst_rate_low_per_m == 0.0
    assert 0.0 < band.burst_rate_high_per_m < 0.1
    assert any("no lower limit" in said for said in remarks(band))


def test_identical_bars_still_give_an_interval() -> None:
    """No scatter at all is not a band of no width."""
    band = teach("g", [dataclasses.replace(bars_of(STRONG, 1)[0], number=n) for n in range(1, 9)], optics=OPTICS)
    assert band.burst_rate_low_per_m < band.burst_rate_high_per_m


def test_reference_bar_uses_settled_windows_for_reach() -> None:
    """First and last window, in which the stream fills and empties, say nothing about reach."""
    windows = [window(k * 0.25, 5, 15.0, reach) for k, reach in enumerate((200.0, 450.0, 470.0, 460.0, 700.0))]
    bar = reference_bar(1, "clip", whole(windows), windows)
    assert bar.reach_mm == pytest.approx(460.0)
    assert (bar.reach_track_m, bar.reach_freedom) == (45.0, 2)
    assert (bar.rate_misfit, bar.rate_freedom) == (0.0, 4)
    with pytest.raises(ValueError, match="no track"):
        reference_bar(1, "clip", dataclasses.replace(whole(windows), exposure_m=0.0, track_m=0.0), windows)


def test_wheel_wear_among_references_is_taken_out() -> None:
    """Bars taught while the sparks slowed by a third: reach is taken to the typical speed, scatter stays small."""
    rng = np.random.default_rng(5)
    bars = []
    for number, speed in enumerate(np.linspace(28.0, 19.0, 20), 1):
        bar = reference(number, draw(dataclasses.replace(STRONG, reach_scatter=0.01), rng))
        bars.append(
            dataclasses.replace(bar, spark_speed_m_s=float(speed), reach_mm=bar.reach_mm * (speed / 23.5) ** 0.58)
        )
    band = teach("g", bars, optics=OPTICS)
    assert band.reach_scatter is not None and band.reach_center_mm is not None
    assert band.reach_scatter < 0.03
    assert band.reach_center_mm == pytest.approx(450.0, rel=0.03)


def test_masters_that_agree_and_masters_that_do_not() -> None:
    """Master bars of the same population hold; a station that sees a third fewer bursts does not."""
    rng = np.random.default_rng(3)
    band = taught(STRONG, 20, rng)
    good = verify(band, [reference(k, draw(STRONG, rng)) for k in range(1, 7)])
    assert good.holds
    assert good.ratio_low < 1.05 < good.ratio_high * 1.1
    soiled = dataclasses.replace(STRONG, hazard_per_m=0.3)
    bad = verify(band, [reference(k, draw(soiled, rng)) for k in range(1, 7)])
    assert not bad.holds
    assert "burst-rate is off by -" in bad.sentence
    assert bad.ratio_high < 0.8
    few = verify(band, [reference(k, draw(STRONG, rng)) for k in range(1, 3)])
    assert not few.holds
    assert "at least 3" in few.sentence


def test_figures_of_drawn_bars_are_whole() -> None:
    """The simulation behind these tests: windows add up."""
    windows = figures_of(draw(STRONG, np.random.default_rng(1)))
    assert whole(windows).bursts == sum(one.bursts for one in windows)


def test_looks_of_streaks_are_remembered_where_enough_bars_know_them() -> None:
    """Typical height and width with their scatter from bar to bar; bars of former teachings do not know them."""
    bars = bars_of(STRONG, 8)
    assert teach("g", bars, optics=OPTICS).streak_peak_dn is None
    rng = np.random.default_rng(3)
    looks = np.exp(rng.normal(0.0, 0.1, len(bars)))
    known = [
        dataclasses.replace(b, streak_peak_dn=70.0 * k, streak_width_px=2.4) for b, k in zip(bars, looks, strict=True)
    ]
    band = teach("g", [*bars, *known[:4]], optics=OPTICS)
    assert band.streak_peak_dn is None
    band = teach("g", [*bars, *known], optics=OPTICS)
    assert band.streak_peak_dn == pytest.approx(70.0 * np.exp(np.log(looks).mean()))
    assert band.streak_peak_scatter == pytest.approx(np.log(looks).std(ddof=1))
    assert (band.streak_width_px, band.streak_width_scatter) == pytest.approx((2.4, 0.0), abs=1e-6)
