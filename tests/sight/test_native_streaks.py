"""The compiled search for streaks against its Python form: each step by itself on the same values, and all in one."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray

from edgewatch.sight import lengths as lengths_of
from edgewatch.sight import lone as lone_of
from edgewatch.sight import native
from edgewatch.sight import steps as steps_of
from edgewatch.sight.lengths import KEPT, LEAST_KEPT, PARTS, Lengths
from edgewatch.sight.lone import find_lone
from edgewatch.sight.native import records
from edgewatch.sight.ridges import NOISE_GAIN
from edgewatch.sight.segments import Segments
from edgewatch.sight.steps import Steps, find_steps
from edgewatch.sight.streaks import PAIR_RULES, Lines, _line_levels, find_streaks, pair_steps
from tests.scenes import Look
from tests.sight.test_native import LOOKS, both, exact_reading, pictures, trace
from tests.sight.test_sight import make_optics

__all__ = ["exact_reading"]
SEED = 424_242
STEP = np.dtype(records.Step)
Ends = tuple[NDArray[np.float64], NDArray[np.float64]]


def pack(steps: Steps) -> NDArray[np.void]:
    """Steps as the compiled form has them."""
    packed = np.zeros(steps.height.size, STEP)
    for name in STEP.fields or ():
        packed[name] = getattr(steps, name)
    return packed


def picture(blurred: NDArray[np.float32]) -> object:
    """A picture as the compiled form takes it."""
    return native.reference(records.picture(blurred))


def compiled_steps(
    pieces: Segments, blurred: NDArray[np.float32], noise: float, axis: tuple[float, float], room: int = 4000
) -> NDArray[np.void]:
    """As ``find_steps``."""
    columns = (pieces.begin, pieces.end, pieces.axis, pieces.length, pieces.points)
    made = np.zeros(room, STEP)
    found = native.LIBRARY.edgewatch_steps(
        native.reference(records.Pieces(*map(native.place, columns), pieces.length.size)),
        *map(native.double, axis),
        picture(blurred),
        native.double(noise),
        native.reference(steps_of.RULES),
        native.place(made),
        room,
    )
    assert native.enough(found, room)
    return made[:found]


def compiled_pairs(steps: NDArray[np.void], blurred: NDArray[np.float32], lengths: Lengths) -> NDArray[np.int32]:
    """As ``pair_steps``."""
    made = np.zeros((steps.size // 2 + 1, 2), np.int32)
    found = native.LIBRARY.edgewatch_pairs(
        steps.size,
        native.place(steps),
        picture(blurred),
        native.reference(lengths.record()),
        native.reference(PAIR_RULES),
        native.place(made),
    )
    assert native.enough(found, len(made))
    return made[:found]


def compiled_lone(
    steps: NDArray[np.void], pairs: NDArray[np.int64], blurred: NDArray[np.float32], noise: float, lengths: Lengths
) -> Ends:
    """As ``find_lone`` with lengths known."""
    own, made = np.ascontiguousarray(pairs, np.int32), np.zeros((2, steps.size, 2))
    found = native.LIBRARY.edgewatch_lone(
        steps.size,
        native.place(steps),
        len(own),
        native.place(own),
        picture(blurred),
        native.double(noise),
        native.reference(lengths.record()),
        int(lengths.from_contact),
        native.reference(lone_of.RULES),
        native.reference(lone_of.NET),
        native.place(made[0]),
        native.place(made[1]),
    )
    assert native.enough(found, steps.size)
    return made[0, :found], made[1, :found]


def compiled_learn(lengths: Lengths, begin: NDArray[np.float64], end: NDArray[np.float64]) -> None:
    """As ``Lengths.learn``."""
    begin, end = np.ascontiguousarray(begin), np.ascontiguousarray(end)
    done = native.LIBRARY.edgewatch_learn(
        len(begin),
        native.place(begin),
        native.place(end),
        native.reference(lengths.memory),
        native.reference(lengths_of.RULES),
    )
    assert native.enough(done, 0)


def same_lengths(one: Lengths, other: Lengths) -> None:
    """Everything that is remembered, and what follows from it."""
    mine, own = one.memory, other.memory
    for name in ("kept", "fresh"):
        assert getattr(mine, name) == getattr(own, name), name
    assert mine.lengths.number == own.lengths.number
    for name in ("all_px", "straight_px"):
        assert getattr(mine, name) == pytest.approx(getattr(own, name)), name
    for name in ("longest_px", "spread"):
        assert getattr(mine.lengths, name) == pytest.approx(getattr(own.lengths, name)), name
    assert one.from_contact == other.from_contact
    assert np.allclose(one._kept, other._kept)
    assert np.allclose(one._known(), other._known())


def apart(one: Ends, other: Ends) -> int:
    """How many lines are in one list and not in the other."""
    rounded = [{tuple(line) for line in np.rint(4.0 * np.concatenate(ends, axis=1)).tolist()} for ends in (one, other)]
    return len(rounded[0] ^ rounded[1])


@pytest.mark.parametrize("look", LOOKS)
def test_steps_pairs_and_lone_lines_are_the_same(look: Look) -> None:
    """Step for step and streak for streak, before lengths are known and after."""
    optics = make_optics()
    lengths, seen = Lengths(optics.contact_px), [0, 0]
    for excess, noise in pictures(optics, look, SEED + 3):
        ridges, pieces = trace(excess, noise)
        ground, blurred = noise * NOISE_GAIN, ridges.blurred
        plain = find_steps(pieces, blurred, ground, optics.axis)
        own = compiled_steps(pieces, blurred, ground, optics.axis)
        assert own.size > 30
        for name in STEP.fields or ():
            assert np.allclose(getattr(plain, name), own[name], atol=1e-3), name
        packed = pack(plain)
        pairs = pair_steps(plain, blurred, lengths)
        assert np.array_equal(pairs, compiled_pairs(packed, blurred, lengths))
        lone = find_lone(plain, pairs, blurred, ground, lengths)
        if lengths.known:
            found = compiled_lone(packed, pairs, blurred, ground, lengths)
            assert apart(lone, found) <= 1, "a line may share with a longer one just as much as is allowed"
        seen[0] += len(pairs)
        seen[1] += len(lone[0])
        lengths.learn(plain.at[pairs[:, 0]], plain.at[pairs[:, 1]])
    assert lengths.known
    assert min(seen) > 30, "some of which one end is seen, some whole"


def make_streaks(rng: np.random.Generator, count: int) -> Ends:
    """Begins and ends (N, 2) px of streaks out of a contact point at (20, 30), one in five flying across; many of one
    length or at one distance, which they have to the last digit in either form, for they lie along a row.
    """
    half = np.rint(1024.0 * np.exp(np.round(rng.normal(3.5, 0.4, count), 1))) / 2048.0
    middle = np.stack([20.0 + rng.integers(1, 300, count), np.full(count, 30.0)], axis=1)
    across = rng.uniform(size=count) < 0.2
    way = half[:, None] * np.stack([~across, across], axis=1)
    return middle - way, middle + way


def turn_streaks(rng: np.random.Generator, streaks: Ends) -> Ends:
    """Turned about the contact point, each by an angle of its own."""
    turn = np.exp(1j * rng.uniform(-3.0, 3.0, len(streaks[0])))
    turned = [(end[:, 0] - 20.0 + 1j * (end[:, 1] - 30.0)) * turn for end in streaks]
    begin, end = (np.stack([20.0 + one.real, 30.0 + one.imag], axis=1) for one in turned)
    return begin, end


@given(st.lists(st.integers(0, 60), min_size=1, max_size=12), st.integers(0, 2**32 - 1))
def test_lengths_are_learnt_the_same(counts: list[int], seed: int) -> None:
    """Picture after picture: from nothing, few and many streaks, until the oldest are forgotten."""
    rng = np.random.default_rng(seed)
    plain, own = Lengths((20.0, 30.0)), Lengths((20.0, 30.0))
    for count in counts:
        begin, end = make_streaks(rng, count)
        plain.learn(begin, end)
        compiled_learn(own, begin, end)
        same_lengths(plain, own)


def test_more_streaks_than_are_kept() -> None:
    """In one picture, and in many: the newest stay, in every part of the table."""
    rng = np.random.default_rng(SEED)
    plain, own = Lengths((20.0, 30.0)), Lengths((20.0, 30.0))
    for count in (LEAST_KEPT - 2, 3 * KEPT, 5, KEPT, KEPT // 2, 0, 1):
        begin, end = turn_streaks(rng, make_streaks(rng, count))
        end += rng.normal(0.0, 0.5, end.shape)
        plain.learn(begin, end)
        compiled_learn(own, begin, end)
        same_lengths(plain, own)
    assert (own.memory.kept, own.memory.lengths.number) == (KEPT, PARTS)


def same_lines(plain: Lines, own: Lines) -> None:
    """Every line, in the same order."""
    assert np.array_equal(plain.whole, own.whole)
    for name in ("begin", "end", "level"):
        mine, other = getattr(plain, name), getattr(own, name)
        assert (mine.shape, mine.dtype) == (other.shape, other.dtype), name
        assert np.allclose(mine, other, atol=1e-2), name


@pytest.mark.parametrize("look", LOOKS)
def test_streaks_are_the_same(look: Look) -> None:
    """All steps in one, each form with a memory of its own."""
    optics = make_optics()
    memories, seen = [Lengths(optics.contact_px), Lengths(optics.contact_px)], np.zeros(2, np.int64)
    for excess, noise in pictures(optics, look, SEED + 6):
        ridges, pieces = trace(excess, noise)
        turns = iter(memories)
        plain, own = both(
            lambda p=pieces, b=ridges.blurred, n=noise, t=turns: find_streaks(
                p, b, n * NOISE_GAIN, next(t), optics.axis
            )
        )
        same_lines(plain, own)
        same_lengths(*memories)
        assert np.allclose(_line_levels(own.begin, own.end, ridges.blurred), own.level, atol=1e-2)
        seen += (int(own.whole.sum()), int((~own.whole).sum()))
    assert seen.min() > 30, "some of which one end is seen, some whole"


def test_the_first_picture_is_helped_by_what_it_teaches() -> None:
    """Lone steps are followed in it already; without a piece there is nothing, and no error."""
    optics = make_optics()
    excess, noise = next(pictures(optics, Look(), SEED + 7))
    ridges, pieces = trace(excess, noise)
    plain, own = both(
        lambda: find_streaks(pieces, ridges.blurred, noise * NOISE_GAIN, Lengths(optics.contact_px), optics.axis)
    )
    same_lines(plain, own)
    assert 0 < own.whole.sum() < own.whole.size
    ridges, pieces = trace(np.zeros_like(excess), noise)
    for lines in both(lambda: find_streaks(pieces, ridges.blurred, noise, Lengths(optics.contact_px), optics.axis)):
        assert lines.begin.shape == lines.end.shape == (0, 2)
        assert lines.level.shape == lines.whole.shape == (0,)


def test_more_steps_than_there_is_room_for() -> None:
    """One piece across a picture of stripes: it has a step at every border, and lengths are learnt once."""
    blurred = np.zeros((40, 400), np.float32)
    for left in range(20, 380, 20):
        blurred[:, left : left + 11] = 100.0
        blurred[:, [left, left + 10]] = 50.0
    line = {"begin": [[2.0, 20.0]], "end": [[397.0, 20.0]], "axis": [[1.0, 0.0]]}
    ends = {name: np.asarray(value) for name, value in line.items()}
    one = np.ones(1)
    piece = Segments(**ends, length=395.0 * one, height=one, bend=one, points=np.full(1, 300), spread=one)
    memories = [Lengths((0.0, 20.0)), Lengths((0.0, 20.0))]
    turns = iter(memories)
    plain, own = both(lambda: find_streaks(piece, blurred, 1.0, next(turns), (1.0, 0.0)))
    assert compiled_steps(piece, blurred, 1.0, (1.0, 0.0)).size > 4 + 16, "more than find_streaks has room for at first"
    same_lines(plain, own)
    same_lengths(*memories)
    assert own.whole.sum() == 18
    assert memories[1].memory.kept == 18
