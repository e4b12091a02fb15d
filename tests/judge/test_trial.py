"""The trial of one bar: verdicts and their causes."""

import dataclasses
import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from edgewatch.judge.bands import Band
from edgewatch.judge.causes import BLIND, CAUSES, sentence
from edgewatch.judge.trial import CONFORMING, INCONCLUSIVE, NONCONFORMING, Judgement, Trial
from tests.bench.bench_judge import whole, window

LOW = Band(
    grade="low",
    burst_rate_low_per_m=0.05,
    burst_rate_high_per_m=0.13,
    reach_low_mm=450.0,
    reach_high_mm=600.0,
    reach_noise_mm2_m=20_000.0,
    bars_used=20,
)
MIDDLE = dataclasses.replace(
    LOW, grade="middle", burst_rate_low_per_m=0.3, burst_rate_high_per_m=0.65, rate_center_per_m=0.44, rate_scatter=0.1
)
HIGH = dataclasses.replace(
    LOW, grade="high", burst_rate_low_per_m=1.5, burst_rate_high_per_m=3.2, rate_center_per_m=2.2, rate_scatter=0.1
)
NO_REACH = dataclasses.replace(
    MIDDLE, reach_low_mm=None, reach_high_mm=None, reach_center_mm=None, reach_scatter=None, reach_noise_mm2_m=None
)
BANDS = (LOW, MIDDLE, HIGH)


def bar(rate: float, *, track_m: float = 30.0, reach: float = 520.0, count: int = 6, **fields: object) -> list:
    """Windows of a bar with exactly this rate."""
    seen = [
        window(k * 0.25, round(rate * track_m * (k + 1)) - round(rate * track_m * k), track_m, reach)
        for k in range(count)
    ]
    return [dataclasses.replace(one, **fields) for one in seen]


def judged(
    windows: list, *, band: Band | None = MIDDLE, others: tuple = BANDS, causes: tuple = (), **options: object
) -> Judgement:
    """The verdict of these windows."""
    trial = Trial(band, others, **options)
    for one in windows:
        trial.look(one)
    return trial.close(whole(windows), causes)


def test_a_good_bar_conforms() -> None:
    """Figures in the band, other grades excluded."""
    found = judged(bar(0.44))
    assert (found.verdict, found.causes, found.figure) == (CONFORMING, (), "")
    assert found.decided_after_s == 1.5
    assert found.nearest[0][0] == "middle"
    assert found.nearest[0][1] > 0.99


@pytest.mark.parametrize(("rate", "nearest"), [(0.09, "low"), (2.2, "high")])
def test_a_foreign_bar_is_caught_at_once(rate: float, nearest: str) -> None:
    """Another grade: condemned within windows, and named."""
    found = judged(bar(rate))
    assert (found.verdict, found.figure) == (NONCONFORMING, "burst_rate")
    assert found.decided_after_s <= 0.75
    assert found.nearest[0][0] == nearest
    assert sum(weight for _, weight in found.nearest) == pytest.approx(1.0)


@pytest.mark.parametrize("reach", [380.0, 720.0])
def test_reach_alone_condemns(reach: float) -> None:
    """Bursts as taught, reach not."""
    found = judged(bar(0.44, reach=reach, count=10))
    assert (found.verdict, found.figure) == (NONCONFORMING, "reach")


def test_reach_is_not_judged_where_the_band_holds_none() -> None:
    """Taught from cut streams: burst-rate alone."""
    assert judged(bar(0.44, reach=200.0), band=NO_REACH).verdict == CONFORMING


def test_cut_reach_is_inconclusive_unless_bursts_condemn() -> None:
    """The rules of the frame edge."""
    cut = {"cut_share": 0.1, "reach_truncated": True}
    found = judged(bar(0.44, **cut))
    assert (found.verdict, found.causes) == (INCONCLUSIVE, ("reach_truncated",))
    condemned = judged(bar(2.2, **cut))
    assert (condemned.verdict, condemned.figure) == (NONCONFORMING, "burst_rate")
    assert "reach_truncated" in condemned.causes
    assert judged(bar(0.44, **cut), band=NO_REACH).verdict == CONFORMING


@pytest.mark.parametrize("cause", sorted(BLIND))
def test_blindness_never_conforms(cause: str) -> None:
    """Each named cause makes the bar inconclusive."""
    found = judged(bar(0.44), causes=(cause,))
    assert (found.verdict, found.causes) == (INCONCLUSIVE, (cause,))


@pytest.mark.parametrize("cause", sorted(BLIND))
def test_what_is_seen_while_blind_is_no_evidence(cause: str) -> None:
    """Windows under such a cause condemn nobody."""
    trial = Trial(MIDDLE, BANDS)
    for one in bar(5.0):
        standing = trial.look(one, (cause,))
    assert not standing.nonconforming
    assert trial.close(whole(bar(5.0))).verdict == INCONCLUSIVE


def test_too_few_streaks() -> None:
    """Fewer than configured."""
    found = judged(bar(0.44, streaks=5), least_streaks=50)
    assert (found.verdict, found.causes) == (INCONCLUSIVE, ("too_few_streaks",))


def test_unknown_grade_judges_nothing() -> None:
    """No band: inconclusive with its cause; the nearest grades are still named."""
    found = judged(bar(0.44), band=None)
    assert (found.verdict, found.causes) == (INCONCLUSIVE, ("no_band",))
    assert found.nearest[0][0] == "middle"


def test_band_of_other_conditions_is_not_used() -> None:
    """Misfit: not even a clearly foreign bar is condemned by it."""
    for rate in (0.44, 5.0):
        found = judged(bar(rate), misfit=("band_misfit_exposure",))
        assert (found.verdict, found.causes) == (INCONCLUSIVE, ("band_misfit_exposure",))


def test_short_contact_is_inconclusive() -> None:
    """Little track: another grade could look like this."""
    found = judged(bar(0.44, track_m=0.8, count=2))
    assert (found.verdict, found.causes) == (INCONCLUSIVE, ("resembles_other",))


def test_between_two_grades_is_inconclusive() -> None:
    """Not foreign beyond doubt, but it may as well be the other grade."""
    near = dataclasses.replace(
        MIDDLE, grade="near", burst_rate_low_per_m=0.6, burst_rate_high_per_m=1.2, rate_center_per_m=0.85
    )
    found = judged(bar(0.66, track_m=8.0), others=(MIDDLE, near))
    assert (found.verdict, found.causes) == (INCONCLUSIVE, ("resembles_other",))


def test_grades_that_cannot_be_told_apart_do_not_block() -> None:
    """A twin of the expected grade: bars still conform, contrast says the pair is not told apart."""
    twin = dataclasses.replace(MIDDLE, grade="twin")
    found = judged(bar(0.44), others=(MIDDLE, twin, HIGH))
    assert found.verdict == CONFORMING
    assert {grade for grade, _ in found.nearest[:2]} == {"middle", "twin"}


def test_single_grade_needs_evidence_against_a_stated_ratio() -> None:
    """No other grade taught: a bar four times off would have to show."""
    assert judged(bar(0.44), others=()).verdict == CONFORMING
    short = judged(bar(0.44, track_m=2.0, count=3), others=())
    assert (short.verdict, short.causes) == (INCONCLUSIVE, ("evidence_short",))


def test_condemned_is_for_ever() -> None:
    """Once nonconforming, later windows do not acquit; the time of decision stays."""
    trial = Trial(MIDDLE, BANDS)
    for one in bar(3.0, count=2):
        first = trial.look(one)
    assert first.nonconforming
    later = [dataclasses.replace(one, begin_s=one.begin_s + 0.5, end_s=one.end_s + 0.5) for one in bar(0.44, count=40)]
    for one in later:
        trial.look(one)
    assert trial.standing == first


@pytest.mark.parametrize(
    "bad",
    [
        {"track_m": math.nan},
        {"exposure_m": -1.0},
        {"bursts": -3},
        {"exposure_m": math.inf},
        {"reach_mm": -5.0},
        {"begin_s": math.nan},
    ],
)
def test_bad_figures_are_refused_and_counted(bad: dict) -> None:
    """NaN and negative figures poison nothing; the bar is not called conforming on what is left."""
    good = bar(0.44)
    trial = Trial(MIDDLE, BANDS)
    for one in good:
        trial.look(one)
    trial.look(dataclasses.replace(good[-1], **bad))
    found = trial.close(whole(good))
    assert (found.refused, found.verdict) == (1, INCONCLUSIVE)
    assert "figures_refused" in found.causes
    assert math.isfinite(found.log_evidence)


@given(st.permutations(range(8)), st.floats(0.1, 3.0))
@settings(max_examples=25)
def test_evidence_does_not_depend_on_the_order_of_counts(order: list, rate: float) -> None:
    """Sums are all that is kept (burst-rate)."""
    windows = bar(rate, count=8)
    straight, mixed = Trial(NO_REACH, BANDS, false_alarm=1e-300), Trial(NO_REACH, BANDS, false_alarm=1e-300)
    for one, place in zip(windows, order, strict=True):
        straight.look(one)
        mixed.look(dataclasses.replace(windows[place], begin_s=one.begin_s, end_s=one.end_s))
    assert mixed.standing.log_evidence == pytest.approx(straight.standing.log_evidence)


@given(st.floats(0.01, 5.0), st.floats(100.0, 900.0), st.integers(1, 12), st.booleans())
@settings(max_examples=60)
def test_every_bar_gets_one_of_three_verdicts(rate: float, reach: float, count: int, cut: bool) -> None:
    """Whatever the figures: a verdict, registered causes, weights that add up."""
    found = judged(bar(rate, reach=reach, count=count, reach_truncated=cut))
    assert found.verdict in (CONFORMING, NONCONFORMING, INCONCLUSIVE)
    assert all(sentence(cause) for cause in found.causes)
    assert (found.verdict == INCONCLUSIVE) <= bool(found.causes)
    assert sum(weight for _, weight in found.nearest) == pytest.approx(1.0)


def test_wheel_wear_is_compensated() -> None:
    """Sparks a third slower, reach shorter as the flight model says: the bar conforms; with the sparks' speed unknown
    it does not.
    """
    worn_reach = 520.0 * (2.0 / 3.0) ** 0.58
    band = dataclasses.replace(MIDDLE, spark_speed_m_s=20.0, reach_low_mm=480.0, reach_high_mm=560.0)
    slow = bar(0.44, reach=worn_reach, count=12, spark_speed_m_s=20.0 * 2.0 / 3.0)
    assert judged(slow, band=band).verdict == CONFORMING
    assert judged(slow, band=band).reach_mm == pytest.approx(520.0, rel=1e-6)
    unknown = [dataclasses.replace(one, spark_speed_m_s=math.nan) for one in slow]
    assert judged(unknown, band=band).verdict == NONCONFORMING
    told = dataclasses.replace(band, wheel_speed_m_s=30.0)
    assert judged(unknown, band=told, wheel_m_s=20.0).verdict == CONFORMING
    assert judged(unknown, band=band, reach_factor=lambda _: 1.5**0.58).verdict == CONFORMING


def test_causes_have_sentences() -> None:
    """Every cause is registered once, in lower case, with a sentence."""
    for name, cause in CAUSES.items():
        assert name == name.lower() and " " not in name
        assert cause.sentence.endswith(".") and sentence(name) == cause.sentence
    assert set(CAUSES) >= BLIND
    with pytest.raises(ValueError, match="no such cause"):
        sentence("full_moon")


def test_refuses_nonsense() -> None:
    """Risks are probabilities."""
    for name in ("false_alarm", "miss"):
        for risk in (0.0, 1.0, -0.1, math.nan):
            with pytest.raises(ValueError, match=name):
                Trial(MIDDLE, (), **{name: risk})


def test_random_good_bars_are_not_condemned() -> None:
    """A few hundred bars with scatter inside the band, looked at every window."""
    rng = np.random.default_rng(4)
    for _ in range(200):
        rate = rng.uniform(0.3, 0.65)
        windows = [
            window(k * 0.25, int(rng.poisson(rate * 15.0)), 15.0, 520.0 + rng.normal(0.0, 36.0)) for k in range(20)
        ]
        assert judged(windows).verdict != NONCONFORMING
