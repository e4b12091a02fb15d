"""Begin and end of contacts."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import settings as examples
from hypothesis import strategies as st

from edgewatch.figures.contact import Begin, ContactFinder, End, _Span
from edgewatch.settings import FigureSettings

FPS = 200.0


def run(counts: list[int], *, period_s: float = 1.0 / FPS, **settings: float) -> list[Begin | End]:
    """Events of a sequence of streak counts, closed at its end."""
    finder = ContactFinder(FigureSettings(**settings), FPS)
    found = [finder.update(number * period_s, count) for number, count in enumerate(counts)]
    return [event for event in [*found, finder.close(len(counts) * period_s)] if event is not None]


def test_one_contact() -> None:
    """Begin at the first frame with sparks, end at the last."""
    assert run([0] * 40 + [20] * 200 + [0] * 60) == [Begin(t_s=0.2), End(begin_s=0.2, t_s=239 / FPS, reason="gap")]


def test_a_contact_that_lasts_until_the_clip_ends() -> None:
    """Closed: the end is the last frame with sparks."""
    assert run([0] * 10 + [20] * 100)[-1] == End(begin_s=0.05, t_s=109 / FPS, reason="closed")


@pytest.mark.parametrize("hole", [1, 2, 5, 20])
def test_frames_without_streaks_do_not_end_it(hole: int) -> None:
    """A pause shorter than the gap belongs to the contact."""
    assert len(run([0] * 20 + [15] * 60 + [0] * hole + [15] * 60 + [0] * 60)) == 2


def test_stray_streaks_do_not_begin_one() -> None:
    """Single streaks, and one bright frame, are no contact."""
    assert run([0] * 20 + [1] + [0] * 30 + [3] + [0] * 30 + [12] + [0] * 50) == []


def test_stray_streaks_do_not_prolong_one() -> None:
    """After the last sparks a stray streak now and then neither keeps the contact alive nor moves its end."""
    tail = ([0] * 9 + [2]) * 12
    assert run([0] * 20 + [20] * 100 + tail)[1] == End(begin_s=0.1, t_s=119 / FPS, reason="gap")


def test_skipped_frames() -> None:
    """At a third of the rate (frames skipped) the same contact is found."""
    begin, end = run([0] * 14 + [20] * 67 + [0] * 20, period_s=3.0 / FPS)
    assert isinstance(begin, Begin)
    assert begin.t_s == pytest.approx(14 * 3 / FPS)
    assert isinstance(end, End)
    assert end.t_s == pytest.approx(80 * 3 / FPS)


def test_two_contacts_are_two() -> None:
    """Bars that follow each other after more than the gap."""
    kinds = [type(event) for event in run(([0] * 40 + [20] * 50) * 2 + [0] * 40)]
    assert kinds == [Begin, End, Begin, End]


def test_a_contact_that_is_too_long_is_ended_and_said() -> None:
    """After ``longest_s``; sparks that go on begin another."""
    events = run([20] * 500, longest_s=1.0)
    assert [getattr(event, "reason", "begin") for event in events] == [
        "begin",
        "longest",
        "begin",
        "longest",
        "begin",
        "closed",
    ]


def test_time_that_starts_again() -> None:
    """A source opened anew may begin at 0: nothing is raised, the contact is found."""
    finder = ContactFinder(FigureSettings(), FPS)
    for number in range(5):
        finder.update(100.0 + number / FPS, 20)
    found = [finder.update(number / FPS, 20) for number in range(40)]
    assert any(isinstance(event, Begin) for event in found)


@given(st.lists(st.integers(0, 40), max_size=300))
@examples(max_examples=80)
def test_begins_and_ends_alternate(counts: list[int]) -> None:
    """Whatever comes: every begin has an end, in order of time."""
    events = run(counts)
    assert [type(event) for event in events] == [Begin, End] * (len(events) // 2)
    times = [event.t_s for event in events]
    assert times == sorted(times)


def test_refuses_nonsense() -> None:
    """Bad arguments are ValueError."""
    finder = ContactFinder(FigureSettings(), FPS)
    for t_s, count in ((math.nan, 1), (0.0, -1)):
        with pytest.raises(ValueError, match="finite time"):
            finder.update(t_s, count)
    with pytest.raises(ValueError, match="fps"):
        ContactFinder(FigureSettings(), 0.0)


def test_the_tail_of_sparks_in_flight_is_no_contact() -> None:
    """After 60 streaks a frame a handful fly on for half a second: the contact has ended, and no new one begins."""
    finder = ContactFinder(FigureSettings(), 200.0)
    counts = [60] * 200 + [max(0, round(6 - index / 20)) for index in range(200)]
    found = [finder.update(index / 200, count) for index, count in enumerate(counts)]
    said = [one for one in found if one is not None]
    assert [type(one) for one in said] == [Begin, End]
    assert said[1].t_s == pytest.approx(199 / 200)


def test_a_weaker_bar_after_a_strong_one_is_found() -> None:
    """Five streaks a frame after sixty: a bar of its own once the tail could have gone."""
    finder = ContactFinder(FigureSettings(), 200.0)
    counts = [60] * 200 + [0] * 200 + [5] * 200
    said = [one for index, count in enumerate(counts) if (one := finder.update(index / 200, count)) is not None]
    assert [type(one) for one in said] == [Begin, End, Begin]
    assert said[2].t_s == pytest.approx(2.0)


@given(st.integers(0, 2**32 - 1), st.sampled_from([0.02, 0.05, 0.4]), st.floats(0.05, 0.9))
@examples(max_examples=80)
def test_running_sums_are_those_of_the_frames(seed: int, begin_s: float, dark: float) -> None:
    """Sparks that come and go, frames skipped, clocks set back: begins and ends are those told by counting anew."""
    anew, finder = Anew(FigureSettings(begin_s=begin_s), FPS), ContactFinder(FigureSettings(begin_s=begin_s), FPS)
    rng, number = np.random.default_rng(seed), 0
    for _ in range(500):
        strong = rng.uniform() < 0.3
        count = 0 if rng.uniform() < dark else int(rng.choice([40, 60] if strong else [1, 2, 3, 5]))
        number += int(rng.choice([1, 2, 9, 40, -300], p=[0.9, 0.07, 0.02, 0.006, 0.004]))
        assert finder.update(number / FPS, count) == anew.update(number / FPS, count)
        assert (finder.begin_s, finder.last_spark_s) == pytest.approx((anew.begin_s, anew.last_spark_s), nan_ok=True)


class Anew(ContactFinder):
    """Counts the streaks of every span anew from all frames."""

    def update(self, t_s: float, streaks: int) -> Begin | End | None:
        """As the finder, whose frames are all kept beside its own."""
        self.seen = [] if t_s <= self._last_s or not self._recent.frames else self.seen
        self.seen.append((t_s, streaks))
        self._last = Counted(self, t_s - self._settings.begin_s)
        return super().update(t_s, streaks)

    def _mean_over(self, span_s: float, t_s: float) -> float:
        super()._mean_over(span_s, t_s)
        self.seen = [one for one in self.seen if one[0] >= t_s - span_s + 0.5 / FPS]
        return sum(count for _, count in self.seen) / len(self.seen)


class Counted(_Span):
    """Those of a finder's frames that are later than a time; what it is told to let go of it never had."""

    def __init__(self, finder: Anew, after_s: float) -> None:
        super().__init__()
        for at, count in finder.seen:
            if at > after_s:
                super().add(at, count)

    def add(self, t_s: float, streaks: int) -> None:
        """It has that frame already."""

    def clear(self) -> None:
        """And is made anew with every frame."""
