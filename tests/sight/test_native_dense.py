"""The dense steps of the sight, compiled and not: background and blur agree bit for bit, pieces to rounding."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, TypeVar

import cv2
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays
from numpy.typing import NDArray

from edgewatch.sight import native
from edgewatch.sight.background import LEARN_AT, Background
from edgewatch.sight.ridges import BLUR_PX, NOISE_GAIN, find_ridges
from edgewatch.sight.segments import Segments, find_segments

SEED = 555_401
PERIOD_S = 0.02
"""At 50 pictures a second the pattern may step with every other one."""

Result = TypeVar("Result")


def without(step: Callable[[], Result]) -> Result:
    """What a step gives in its Python form."""
    library = native.LIBRARY
    assert library is not None, f"{native.WHY_NOT}; python deploy/build_sight.py compiles it"
    try:
        native.LIBRARY = None
        return step()
    finally:
        native.LIBRARY = library


def scene(rng: np.random.Generator, height: int, width: int, count: int) -> list[NDArray[np.uint8]]:
    """Pictures of a textured ground under a light that differs from place to place and changes, some of it beyond black
    and white; with noise, and bright lines that come and go.
    """
    texture = rng.normal(rng.uniform(10, 200), rng.uniform(1, 20), (height, width))
    y, x = np.mgrid[:height, :width]
    pictures = []
    for _ in range(count):
        away = np.hypot(x - width * rng.random(), y - height * rng.random())
        swell = rng.uniform(-60, 60) * np.exp(-((away / 30.0) ** 2))
        picture = texture + swell + rng.uniform(-8, 8) + rng.normal(0, 2, (height, width))
        for _ in range(3):
            picture[rng.integers(height), :] += rng.uniform(0, 200)
        pictures.append(picture.clip(0, 255).astype(np.uint8))
    return pictures


@settings(deadline=None, max_examples=25)
@given(st.integers(4, 12), st.integers(4, 12), st.integers(0, 2**32 - 1))
def test_background_is_the_same_bit_for_bit(high: int, wide: int, seed: int) -> None:
    """Excess, noise and level of every picture, from the first to long after the pattern is there; and the pattern."""
    rng = np.random.default_rng(seed)
    plain, own = Background(period_s=PERIOD_S), Background(period_s=PERIOD_S)
    pictures = scene(rng, 8 * high, 8 * wide, max(LEARN_AT) + 24)
    if rng.random() < 0.3:
        pictures[-8:] = scene(rng, 8 * high, 8 * wide, 8)  # another scene, or another light
    for picture in pictures:
        expected = without(lambda picture=picture: plain.excess(picture))
        assert np.array_equal(own.excess(picture), expected)
        for name in ("level_dn", "uneven_dn", "noise_dn", "raw_noise_dn"):
            assert getattr(own, name) == pytest.approx(getattr(plain, name), rel=1e-5, abs=1e-5), name
        for name in ("_pattern", "_cells", "_pattern_cells"):
            assert np.array_equal(getattr(own, name), getattr(plain, name)), name
        assert own.settled == plain.settled


def test_a_drift_over_the_whole_range_is_the_same() -> None:
    """A black pattern under full light in one half, and the other way round: the sums take all of their bits."""
    height, width = 64, 96
    for dark, light in ((0, 255), (255, 0), (120, 139), (139, 120)):
        plain, own = Background(period_s=PERIOD_S), Background(period_s=PERIOD_S)
        before = np.full((height, width), dark, np.uint8)
        after = before.copy()
        after[:, : width // 2 - 4] = light
        after[20:28, 60:68] = 128
        for picture in [before] * max(LEARN_AT) + [after, before, after]:
            expected = without(lambda picture=picture, plain=plain: plain.excess(picture))
            assert np.array_equal(own.excess(picture), expected)


@given(arrays(np.uint8, st.tuples(st.integers(3, 40), st.integers(3, 80))))
def test_blur_is_the_same_bit_for_bit(excess: NDArray[np.uint8]) -> None:
    """Whatever is added first, and at the mirrored edges."""
    expected = without(lambda: find_ridges(excess, 2.0)).blurred
    assert np.array_equal(find_ridges(excess, 2.0).blurred, expected)


def test_blur_of_pictures_is_the_same_bit_for_bit() -> None:
    """Of widths with and without whole blocks, white among them."""
    rng = np.random.default_rng(SEED)
    for shape in ((40, 64), (41, 65), (64, 97), (1, 33), (33, 1), (2, 2), (400, 640)):
        excess = rng.integers(0, 256, shape).astype(np.uint8)
        excess[rng.random(shape) < 0.3] = 255
        assert np.array_equal(find_ridges(excess, 2.0).blurred, cv2.sepFilter2D(excess, cv2.CV_32F, _taps(), _taps()))


def _taps() -> NDArray[np.float32]:
    """What the blur makes of a single white pixel, along its row and summed over the others."""
    dot = np.zeros((9, 9), np.uint8)
    dot[4, 4] = 255
    taps: NDArray[np.float32] = (find_ridges(dot, 1000.0).blurred.sum(axis=0) / 255.0)[2:7].astype(np.float32)
    return taps


def test_the_taps_are_a_gaussian_in_whole_parts() -> None:
    """To half a part in 256, and they sum to one; noise of the blurred picture is what they say."""
    taps = _taps()
    gauss = np.exp(-0.5 * (np.arange(-2, 3) / BLUR_PX) ** 2)
    assert np.array_equal(256 * taps, np.rint(256 * taps))
    assert taps.sum() == 1.0
    assert np.abs(taps - gauss / gauss.sum()).max() <= 0.5 / 256
    noise = np.random.default_rng(SEED).integers(0, 256, (400, 640)).astype(np.uint8)
    measured = find_ridges(noise, 1000.0).blurred[2:-2, 2:-2].std() / noise.std()
    assert measured == pytest.approx(NOISE_GAIN, rel=0.01)


def pieces_of(picture: NDArray[np.uint8]) -> Segments:
    """Of what is in a picture above noise of 2 DN."""
    return find_segments(find_ridges(picture, 2.0), np.full(picture.size, -1, np.int32))


def test_lines_in_every_direction_are_the_same() -> None:
    """Along rows and columns too, where the direction's sign is at stake."""
    for angle in range(0, 180, 5):
        picture = np.zeros((120, 160), np.uint8)
        away = np.array([50.0 * np.cos(np.radians(angle)), 50.0 * np.sin(np.radians(angle))])
        ends = [tuple(int(v) for v in np.rint(np.array([80.0, 60.0]) + sign * away)) for sign in (-1, 1)]
        cv2.line(picture, ends[0], ends[1], 200, 1, cv2.LINE_AA)
        plain, own = without(lambda picture=picture: pieces_of(picture)), pieces_of(picture)
        assert own.length.max() > 90.0
        for name in ("begin", "end", "axis", "length", "height", "bend", "points", "spread"):
            assert np.allclose(getattr(own, name), getattr(plain, name), atol=2e-3), (angle, name)


def test_pictures_side_by_side_keep_to_themselves() -> None:
    """What was found in one picture stays as it is while others are looked at."""
    rng, background = np.random.default_rng(SEED), Background(period_s=PERIOD_S)
    kept: list[tuple[Any, ...]] = []
    for picture in scene(rng, 64, 96, max(LEARN_AT) + 8):
        excess = background.excess(picture)
        ridges = find_ridges(excess, background.noise_dn)
        kept.append((excess, excess.copy(), ridges.blurred, ridges.blurred.copy(), ridges.x, ridges.x.copy()))
    for arrays_kept in kept:
        for one, copy in zip(arrays_kept[::2], arrays_kept[1::2], strict=True):
            assert np.array_equal(one, copy)


def test_where_an_array_starts() -> None:
    """The same place in memory, whether the array may be written to or not; of none at all too."""
    picture = np.arange(64 * 64, dtype=np.uint8).reshape(64, 64)
    written, fixed = np.empty((8, 8), np.float32), picture.copy()
    fixed.flags.writeable = False
    for source in (picture, fixed):
        done = native.LIBRARY.edgewatch_cells(native.start(source), 64, 64, native.start(written))
        assert done == 0
        assert np.array_equal(written, np.rint(source.reshape(8, 8, 8, 8).mean(axis=(1, 3))))
    assert native.start(np.zeros(0)) is not None


def test_points_are_linked_the_same() -> None:
    """Of noise, where points lie in every way about each other: the same points in every piece, unless rounding tips
    the balance of one.
    """
    rng, others, pieces = np.random.default_rng(SEED), 0, 0
    for _ in range(20):
        noise = cv2.GaussianBlur(rng.normal(0.0, 60.0, (120, 160)).astype(np.float32), (0, 0), rng.uniform(0.4, 1.0))
        ridges = find_ridges(noise.clip(0, 255).astype(np.uint8), float(rng.uniform(0.5, 8.0)))
        scratch = np.full(noise.size, -1, np.int32)
        plain = without(lambda r=ridges, s=scratch: find_segments(r, s))
        own = find_segments(ridges, scratch)
        pieces += own.points.size
        others += not np.array_equal(plain.points, own.points)
        if np.array_equal(plain.points, own.points):
            assert np.allclose(plain.begin, own.begin, atol=2e-3)
            assert np.allclose(plain.end, own.end, atol=2e-3)
    assert pieces > 1000
    assert others <= 1
