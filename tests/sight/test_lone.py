"""Steps left alone: how far their lines run, which are listed, and what is left to the bursts."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray

from edgewatch.sight import lone_weights
from edgewatch.sight.lengths import Lengths
from edgewatch.sight.lone import Lone, follow_arms, follow_steps, judge_marks, pick_lines
from edgewatch.sight.steps import Steps

TYPICAL_PX = 60.0
NOISE_DN = 1.0
NO_WHOLE = (np.zeros((0, 2)), np.zeros((0, 2)), np.zeros(0))


def taught() -> Lengths:
    """Lengths that know of streaks of 60 px out of a contact point at (10, 100)."""
    lengths = Lengths((10.0, 100.0))
    away = np.linspace(20.0, 200.0, 40)[:, None]
    begin = np.array([10.0, 100.0]) + away * np.array([1.0, 0.0])
    lengths.learn(begin, begin + np.array([TYPICAL_PX, 0.0]))
    assert lengths.known
    assert lengths.from_contact
    return lengths


def bar(x0: int, x1: int, height: float = 40.0) -> NDArray[np.float32]:
    """A picture with one bright bar along y = 100."""
    picture = np.zeros((200, 320), np.float32)
    picture[98:103, x0:x1] = height
    return picture


def step(x: float, y: float, *, begins: bool, way: tuple[float, float] = (1.0, 0.0), size: float = 40.0) -> Steps:
    """One step of a line that runs along ``way``, from darkness."""
    return Steps(
        at=np.array([[x, y]]),
        inward=np.array([way]) * (1.0 if begins else -1.0),
        height=np.array([40.0]),
        size=np.array([size]),
        begins=np.array([begins]),
        share=np.array([1.0]),
    )


def follow(steps: Steps, picture: NDArray[np.float32], whole: tuple[NDArray[np.float64], ...] = NO_WHOLE) -> Lone:
    """The lines of all steps."""
    return follow_steps(steps, np.arange(len(steps.at)), whole, picture, NOISE_DN, taught())  # type: ignore[arg-type]


def test_a_line_is_as_long_as_is_typical_where_it_stays_lit() -> None:
    """Nothing shows where it ends, for another runs on."""
    lone = follow(step(100.0, 100.0, begins=True), bar(100, 300))
    assert np.allclose(lone.begin, [[100.0, 100.0]])
    assert np.allclose(lone.end, [[100.0 + TYPICAL_PX, 100.0]], atol=1.0)
    assert pick_lines(lone).tolist() == [0]


def test_a_line_ends_where_it_is_dark() -> None:
    """Half of the typical length is lit; a tenth is too little to be looked at."""
    assert np.allclose(follow(step(100.0, 100.0, begins=True), bar(100, 130)).end, [[130.0, 100.0]], atol=3.0)
    assert len(follow(step(100.0, 100.0, begins=True), bar(100, 106)).begin) == 0


def test_nothing_begins_behind_the_wheel() -> None:
    """An end nearer to the contact point than streaks are long belongs to one that began there."""
    lone = follow(step(50.0, 100.0, begins=False), bar(0, 50))
    assert np.allclose(lone.begin, [[10.0, 100.0]], atol=1.0)


def test_a_short_piece_is_turned_towards_the_ray() -> None:
    """Its own direction is known to a tenth, the stream's much better; a long piece keeps its own."""
    tilted = (np.cos(0.08), np.sin(0.08))
    short = follow(step(100.0, 100.0, begins=True, way=tilted, size=8.0), bar(100, 300, 40.0) + 10.0)
    long = follow(step(100.0, 100.0, begins=True, way=tilted, size=60.0), bar(100, 300, 40.0) + 10.0)
    rise_short, rise_long = short.end[0, 1] - 100.0, long.end[0, 1] - 100.0
    assert 0.0 < rise_short < 0.2 * TYPICAL_PX * 0.08
    assert rise_long == pytest.approx(TYPICAL_PX * 0.08, abs=0.5)


def test_what_a_whole_streak_explains_is_not_listed_again() -> None:
    """The same step, found once more on a neighbour's piece."""
    steps, picture = step(100.0, 100.0, begins=True), bar(100, 160)
    free = follow(steps, picture)
    whole = (np.array([[100.0, 101.0]]), np.array([[160.0, 101.0]]), np.array([40.0]))
    taken = follow(steps, picture, whole)
    assert pick_lines(free).tolist() == [0]
    assert judge_marks(taken.marks)[0] < judge_marks(free.marks)[0] - 1.0
    assert pick_lines(taken).size == 0


def test_a_line_across_the_stream_is_left_to_the_bursts() -> None:
    """It passes the contact point by: no streak, but followed as an arm, and once where two steps say so."""
    picture = bar(0, 0)
    picture[60:100, 148:153] = 40.0
    one, two = (step(x, 100.0, begins=True, way=(0.0, -1.0)) for x in (150.0, 150.5))
    both = Steps(*(np.concatenate([getattr(s, n) for s in (one, two)]) for n in Steps.__dataclass_fields__))
    assert len(follow(both, picture).begin) == 0
    begin, end = follow_arms(both, np.arange(2), picture, NOISE_DN, taught())
    assert len(begin) == 1
    assert np.allclose(end - begin, [[0.0, -40.0]], atol=3.0)
    elsewhere = taught()
    far = np.linspace(20.0, 300.0, 60)[:, None] * np.array([1.0, 0.0])
    elsewhere.learn(far, far + np.array([0.0, 90.0]))
    assert not elsewhere.from_contact
    assert len(follow_arms(both, np.arange(2), picture, NOISE_DN, elsewhere)[0]) == 0


def test_weights_fit_the_marks() -> None:
    """The weights in the package belong to the marks that are made; no line is no odds."""
    lone = follow(step(100.0, 100.0, begins=True), bar(100, 300))
    assert lone.marks.shape == (1, lone_weights.HIDDEN.shape[0])
    assert judge_marks(lone.marks[:0]).shape == (0,)


@pytest.mark.parametrize("way", [1.0, -1.0])
def test_turn_is_the_angle_to_the_ray(way: float) -> None:
    """Signed alike for a vector that leads away from the contact point and for its opposite."""
    lengths = Lengths((0.0, 0.0))
    unit = way * np.array([[np.cos(0.1), np.sin(0.1)]])
    assert lengths.turn(np.array([[50.0, 0.0]]), unit)[0] == pytest.approx(np.sin(0.1))
