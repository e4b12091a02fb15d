"""The last steps of the sight: what is listed, and the light; compiled forms against Python forms."""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable
from typing import TypeVar

import cv2
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays
from numpy.typing import NDArray

from edgewatch.sight import native
from edgewatch.sight.bursts import Apexes
from edgewatch.sight.detections import BurstFlag, StreakFlag
from edgewatch.sight.glow import Glow
from edgewatch.sight.lengths import Lengths
from edgewatch.sight.light import SAMPLE_STEP_PX, _find_width, _full_share
from edgewatch.sight.listing import ROOM, Listed, Listing
from edgewatch.sight.optics import Optics
from edgewatch.sight.ridges import find_ridges
from edgewatch.sight.sight import Sight
from edgewatch.sight.streaks import Lines
from tests.scenes import Look, Scene, Stream
from tests.sight.test_native import read_exactly
from tests.sight.test_sight import make_optics

SEED = 515_151
Result = TypeVar("Result")


def both(step: Callable[[], Result]) -> tuple[Result, Result]:
    """What the Python form of a step gives, and what its compiled form does."""
    library = native.LIBRARY
    assert library is not None, f"{native.WHY_NOT}; python deploy/build_sight.py compiles it"
    try:
        native.LIBRARY = None
        plain = step()
    finally:
        native.LIBRARY = library
    return plain, step()


take = Listing.take


def take_both(
    listing: Listing, lines: Lines, snr_per_dn: float, apexes: Apexes, lengths: Lengths
) -> tuple[Listed, NDArray[np.float64]]:
    """The list of a picture, which both forms give alike, and what both remember after it."""
    glow, before, kept = listing._glow, listing._glow.memory, []

    def step() -> Listed:
        glow.memory = before
        listed = take(listing, lines, snr_per_dn, apexes, lengths)
        kept.append(glow.memory)
        return listed

    plain, own = both(step)
    for name, mine, other in zip(Listed._fields, plain, own, strict=True):
        mine, other = np.asarray(mine), np.asarray(other)
        assert mine.dtype == other.dtype, name
        assert mine.shape == other.shape, name
        assert np.allclose(mine, other, rtol=1e-5, atol=1e-4, equal_nan=True), name
    assert np.allclose(kept[0], kept[1], rtol=0.0, atol=1e-9)
    assert kept[0].shape == kept[1].shape
    return own, kept[1]


@pytest.mark.parametrize(("fps", "exposure_ms"), [(200.0, 2.5), (1000.0, 0.9)])
def test_a_stream_is_listed_the_same(fps: float, exposure_ms: float, monkeypatch: pytest.MonkeyPatch) -> None:
    """Streaks, bursts, their flags, what is remembered and the origin, picture after picture."""
    seen: Counter[str] = Counter()

    def compared(listing: Listing, lines: Lines, snr_per_dn: float, apexes: Apexes, lengths: Lengths) -> Listed:
        listed, kept = take_both(listing, lines, snr_per_dn, apexes, lengths)
        seen["streaks"] += len(listed.streaks)
        seen["left out"] += len(lines.begin) - len(listed.streaks)
        seen["cut begin"] += int((listed.streak_flags & StreakFlag.CUT_BEGIN > 0).sum())
        seen["cut end"] += int((listed.streak_flags & StreakFlag.CUT_END > 0).sum())
        seen["bursts"] += len(listed.bursts)
        seen["no news"] += len(apexes.at) - len(listed.bursts)
        seen["not for the rate"] += len(listed.bursts) - listed.rate_bursts
        seen["late"] += int((listed.burst_flags & BurstFlag.LATE > 0).sum())
        seen["at the edge"] += int((listed.burst_flags & BurstFlag.EDGE > 0).sum())
        seen["remembered"] += len(kept)
        seen["origins"] += int(np.isfinite(listed.origin_offset_px))
        return listed

    monkeypatch.setattr(Listing, "take", compared)
    optics = make_optics(fps=fps, exposure_ms=exposure_ms, contact_px=(12.0, 9.0), direction_deg=3.0)
    sight = Sight(optics)
    for picture, _ in Scene(optics, Stream(hazard_per_m=4.0), Look(), SEED, 40.5 / fps):
        sight.look(picture)
    kinds = {
        "streaks",
        "left out",
        "cut begin",
        "cut end",
        "bursts",
        "no news",
        "not for the rate",
        "late",
        "at the edge",
    }
    assert all(seen[kind] > 0 for kind in {*kinds, "remembered", "origins"}), f"every kind has been there: {seen}"


def draw(rng: np.random.Generator, optics: Optics, count: int, bursts: int) -> tuple[Lines, Apexes]:
    """Lines from anywhere, most of them away from the contact, and bursts, some of them where lines begin or end."""
    contact = np.asarray(optics.contact_px)
    begin = rng.uniform([-5.0, -5.0], [optics.width_px + 5.0, optics.height_px + 5.0], (count, 2))
    unit = (begin - contact) / np.hypot(*(begin - contact).T)[:, None]
    unit = np.where(rng.uniform(size=(count, 1)) < 0.7, unit, rng.normal(0.0, 1.0, (count, 2)))
    end = begin + unit * rng.exponential(30.0, (count, 1)) + rng.normal(0.0, 1.0, (count, 2))
    at = rng.uniform([0.0, 0.0], [optics.width_px, optics.height_px], (bursts, 2))
    if count:
        line, some = rng.integers(count, size=bursts), rng.uniform(size=bursts) < 0.7
        ends = np.where(rng.uniform(size=(bursts, 1)) < 0.5, begin[line], end[line])
        at[some] = ends[some] + rng.normal(0.0, 1.0, (int(some.sum()), 2))
    level, whole = rng.exponential(20.0, count), rng.uniform(size=count) < 0.6
    sure, late, fresh = rng.uniform([[0.4], [0.0], [0.0]], 1.0, (3, bursts))
    return Lines(begin=begin, end=end, level=level, whole=whole), Apexes(at=at, sure=sure, late=late, fresh=fresh)


@given(st.integers(0, 2**32 - 1), st.sampled_from([0, 1, 5, 6, 24, 25, 90]), st.sampled_from([0, 1, 12]))
def test_any_lines_and_bursts_are_listed_the_same(seed: int, count: int, bursts: int) -> None:
    """None, few and many, before lengths are known and after, over pictures in which bursts come again."""
    rng, optics = np.random.default_rng(seed), make_optics(fps=(60.0, 1000.0)[seed % 2], exposure_ms=0.9)
    glow = Glow(optics, longest_glow_s=0.0035, arm_draw_s=0.00035, late_listed_s=0.0005)
    listing = Listing(optics, glow, least_snr=4.7, least_length_px=6.0, rate_sure=0.65)
    lengths = Lengths(optics.contact_px)
    lines, apexes = draw(rng, optics, count, bursts)
    for _ in range(5):
        take_both(listing, lines, 0.5, apexes, lengths)
        again = rng.uniform(size=bursts) < 0.7
        lengths.learn(lines.begin, lines.end)
        lines, fresh = draw(rng, optics, count, bursts)
        moved = np.where(again[:, None], apexes.at + rng.normal(0.0, 4.0, (bursts, 2)), fresh.at)
        apexes = Apexes(at=moved, sure=fresh.sure, late=fresh.late, fresh=fresh.fresh)


def test_more_lines_and_bursts_than_there_is_room_for() -> None:
    """The room grows to what is needed, and what was listed before stays as it was."""
    optics = make_optics()
    glow = Glow(optics, longest_glow_s=0.0035, arm_draw_s=0.00035, late_listed_s=0.0005)
    listing = Listing(optics, glow, least_snr=4.7, least_length_px=6.0, rate_sure=0.65)
    rng, lengths = np.random.default_rng(SEED), Lengths(optics.contact_px)
    first, _ = take_both(listing, *_with_snr(draw(rng, optics, 60, 20)), lengths)
    before = first.streaks.copy()
    many, _ = take_both(listing, *_with_snr(draw(rng, optics, 5 * ROOM, 2 * ROOM)), lengths)
    assert len(many.streaks) > ROOM / 2
    assert len(many.bursts) > ROOM / 2
    assert np.array_equal(first.streaks, before)


def _with_snr(drawn: tuple[Lines, Apexes]) -> tuple[Lines, float, Apexes]:
    return drawn[0], 3.0, drawn[1]


@given(
    arrays(
        np.uint8,
        st.tuples(st.integers(1, 40), st.integers(1, 40)),
        elements=st.sampled_from([0, 253, 254, 254, 255]),
    ),
    st.integers(0, 3),
)
def test_full_scale_is_found_the_same(picture: NDArray[np.uint8], skipped: int) -> None:
    """On pictures of any size, cut out of others, that may be only read."""
    part = picture[:, skipped:]
    part.flags.writeable = False
    if part.size:
        plain, own = both(lambda: _full_share(part))
        assert plain == own


def test_a_patch_at_full_scale_has_its_share() -> None:
    """A patch of eleven by eleven sampled pixels holds ten by ten places; a line as bright holds none."""
    picture = np.zeros((100, 200), np.uint8)
    picture[8 : 8 + 10 * SAMPLE_STEP_PX + 1, 20 : 20 + 10 * SAMPLE_STEP_PX + 1] = 254
    picture[80:82] = 255
    plain, own = both(lambda: _full_share(picture))
    assert plain == own == pytest.approx(100 / (24 * 49))


def test_width_is_read_the_same(monkeypatch: pytest.MonkeyPatch) -> None:
    """From no line, and from many of every picture; a rounding may move one profile by half a pixel."""
    if int(cv2.__version__.split(".")[0]) < 5:
        monkeypatch.setattr("edgewatch.sight.light.read_levels", read_exactly)
    optics = make_optics()
    for spread in (0.7, 1.1, 2.0):
        rng, seen = np.random.default_rng(SEED), 0
        for picture, truth in Scene(optics, Stream(), Look(spread_px=spread), SEED, 6.5 / optics.fps):
            ridges = find_ridges(np.maximum(picture, 20) - 20, 2.0)
            ends = truth.streaks.astype(np.float64)
            for count in (0, 1, 7, len(ends)):
                begin, end = np.array(ends[:count, :2]), np.array(ends[:count, 2:])
                (number, width), (own, own_width) = both(lambda b=begin, e=end, r=ridges: _find_width(b, e, r))
                assert number == own
                assert own_width == pytest.approx(width, abs=0.5 / max(1, number // 3), nan_ok=True)
                seen += number
        assert seen > 100
        outside = rng.uniform(-60.0, 700.0, (2, 40, 2))
        (number, width), (own, own_width) = both(lambda a=outside, r=ridges: _find_width(a[0], a[1], r))
        assert number == own
        assert own_width == pytest.approx(width, abs=0.5, nan_ok=True)
