"""Bars judged again."""

import dataclasses

import numpy as np
import pytest

from edgewatch.judge.review import PastBar, joined, review, tallied
from tests.bench.bench_judge import GRADES, draw, figures_of, taught, whole

RISKS = {"false_alarm": 0.001, "miss": 0.01, "least_streaks": 50}


def bands() -> dict:
    """Two taught grades."""
    rng = np.random.default_rng(1)
    return {grade.grade: taught(grade, 20, rng) for grade in GRADES[1:4]}


def past(grade: int, number: int, rng: np.random.Generator, **fields: object) -> PastBar:
    """A journalled bar of this grade, expected to be G45, called inconclusive."""
    windows = tuple(figures_of(draw(GRADES[grade], rng)))
    kept = {"expected": "G45", "verdict": "inconclusive", "causes": (), "confirmed": GRADES[grade].grade}
    return PastBar(number=number, bar=whole(windows), windows=windows, **{**kept, **fields})


def test_bars_are_judged_again() -> None:
    """Good ones conform, foreign ones do not; what changed is said; confirmed bars are counted."""
    rng = np.random.default_rng(2)
    bars = [past(1, 1, rng), past(3, 2, rng), past(1, 3, rng, verdict="nonconforming")]
    found = review(bars, bands(), **RISKS)
    assert [one.now.verdict for one in found] == ["conforming", "nonconforming", "conforming"]
    assert all(one.changed for one in found)
    before = tallied((one.past, one.past.verdict) for one in found)
    after = tallied((one.past, one.now.verdict) for one in found)
    assert (before.false_alarms, before.misses, before.confirmed) == (1, 0, 3)
    assert (after.false_alarms, after.misses) == (0, 0)
    assert after.verdicts == {"conforming": 2, "nonconforming": 1}


def test_blindness_in_the_journal_holds() -> None:
    """A bar that could not be seen is not judged by a better band; causes of the old band are judged anew."""
    rng = np.random.default_rng(3)
    blind, short = past(1, 1, rng, causes=("saturated",)), past(1, 2, rng, causes=("no_band",))
    found = review([blind, short], bands(), **RISKS)
    assert [(one.now.verdict, one.now.causes) for one in found] == [
        ("inconclusive", ("saturated",)),
        ("conforming", ()),
    ]


def test_a_grade_without_band() -> None:
    """Stays inconclusive, and says why."""
    (found,) = review([past(1, 1, np.random.default_rng(4), expected="C99")], bands(), **RISKS)
    assert (found.now.verdict, found.now.causes) == ("inconclusive", ("no_band",))


def test_a_bar_without_windows_is_judged_as_one() -> None:
    """Windows thinned away: the bar's own figures are all there is."""
    one = dataclasses.replace(past(3, 1, np.random.default_rng(5)), windows=())
    assert review([one], bands(), **RISKS)[0].now.verdict == "nonconforming"


def test_windows_are_joined() -> None:
    """Counts add up, the whole is the whole, longer windows are fewer."""
    windows = figures_of(draw(GRADES[1], np.random.default_rng(6)))
    longer = joined(windows, 1.0)
    assert len(longer) == 5
    assert sum(one.bursts for one in longer) == sum(one.bursts for one in windows)
    assert longer[0].reach_mm == pytest.approx(
        sum(one.reach_mm * one.track_m for one in windows[:4]) / sum(one.track_m for one in windows[:4])
    )
    assert joined(windows, 0.1) == tuple(windows)
    with pytest.raises(ValueError, match="window_s"):
        joined(windows, 0.0)


def test_other_windows_give_the_same_verdict_on_clear_bars() -> None:
    """Looking less often changes when, not what."""
    rng = np.random.default_rng(7)
    bars = [past(grade, number, rng) for number, grade in enumerate([1] * 6 + [3] * 3, 1)]
    known = bands()
    often = review(bars, known, **RISKS)
    seldom = review(bars, known, window_s=1.0, **RISKS)
    assert [one.now.verdict for one in often] == [one.now.verdict for one in seldom]
