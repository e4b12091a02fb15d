"""Parts of the sight on their own: background, ridges, pieces, lengths, candidates, glow."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray
from scipy.sparse import coo_matrix
from scipy.sparse.csgraph import connected_components

from edgewatch.sight import burst_weights as learnt
from edgewatch.sight.background import LEARN_AT, LEAST_NOISE_DN, Background
from edgewatch.sight.burst_net import judge_patches, sift_patches, windows
from edgewatch.sight.bursts import SIFT_BLOCK, Apexes, find_apexes
from edgewatch.sight.candidates import find_candidates
from edgewatch.sight.glow import SEEN_SHARE, Glow
from edgewatch.sight.lengths import LEAST_KEPT, Lengths
from edgewatch.sight.optics import Optics
from edgewatch.sight.reading import read_levels
from edgewatch.sight.ridges import NOISE_GAIN, Ridges, find_ridges
from edgewatch.sight.rings import (
    BEFORE_RINGS,
    CONTEXT_SIZE,
    RING_DIRECTIONS,
    RING_RADII_PX,
    RINGS_SIFT,
    read_before,
    read_context,
    read_patches,
)
from edgewatch.sight.segments import Segments, fit_segments, label_components, link_ridges
from tests.sight.test_sight import SEED, draw, make_optics, star


def trace(picture: NDArray[np.uint8], ground: int = 12, noise: float = 1.5) -> tuple[Ridges, Segments]:
    """Ridges and pieces of a picture on a known ground."""
    excess = np.where(picture > ground, picture - np.minimum(picture, ground), 0).astype(np.uint8)
    ridges = find_ridges(excess, noise)
    scratch = np.full(picture.size, -1, np.int32)
    pieces = fit_segments(ridges, link_ridges(ridges, scratch))
    assert (scratch == -1).all(), "the scratch is given back clean"
    return ridges, pieces


@pytest.mark.parametrize("degrees", [0.0, 17.0, 45.0, 63.0, 90.0, 120.0, 171.0])
def test_ridge_points_lie_on_the_line_and_along_it(degrees: float) -> None:
    """Steger's promise: crest to a fraction of a pixel, direction to a few degrees, whatever the angle."""
    c, s = math.cos(math.radians(degrees)), math.sin(math.radians(degrees))
    ridges, pieces = trace(draw([(160 - 40 * c, 100 - 40 * s, 160 + 40 * c, 100 + 40 * s, 90.0)]))
    near = np.hypot(ridges.x - 160, ridges.y - 100) < 35
    off = (ridges.x - 160) * s - (ridges.y - 100) * c
    assert near.sum() > 45
    on = near & (np.abs(off) < 0.8)  # noise leaves a stray point on a flank now and then
    assert on.sum() > 0.9 * near.sum()
    assert np.abs(off[on]).mean() < 0.2
    assert (np.abs(ridges.cos * c + ridges.sin * s)[on] > 0.97).mean() > 0.9
    longest = int(np.argmax(pieces.length))
    assert pieces.length[longest] > 65
    assert abs(pieces.axis[longest] @ np.array([c, s])) > 0.9998
    assert pieces.spread[longest] < 0.4


def test_crossing_lines_are_different_pieces() -> None:
    """No piece runs from one line into another that crosses it at 30 degrees."""
    _, pieces = trace(draw([(100.0, 100.0, 220.0, 100.0, 80.0), (108.0, 70.0, 212.0, 130.0, 80.0)]))
    long = pieces.length > 20
    flat = np.abs(pieces.axis[long, 1]) < 0.05
    steep = np.abs(np.abs(pieces.axis[long, 1]) - 0.5) < 0.05
    assert flat.any()
    assert steep.any()
    assert (flat | steep).all()


def test_noise_alone_makes_hardly_any_piece() -> None:
    """The threshold leaves a handful of false ridge points in 64000 pixels, which do not line up."""
    ridges, pieces = trace(draw([]))
    assert ridges.index.size < 60
    assert pieces.length.size <= 3


def test_noise_gain_is_what_the_blur_leaves() -> None:
    """Noise of the blurred picture per noise of the picture, against white noise."""
    noise = np.random.default_rng(SEED).normal(100.0, 5.0, (200, 320))
    ridges = find_ridges(np.rint(noise).astype(np.uint8), 50.0)
    assert ridges.blurred[5:-5, 5:-5].std() == pytest.approx(5.0 * NOISE_GAIN, rel=0.03)


def test_background_of_a_still_scene_is_learnt() -> None:
    """Bright bars and hot pixels stay in the picture and leave the excess; noise is measured; a spark stands out."""
    rng = np.random.default_rng(SEED)
    scene = np.full((200, 320), 20.0)
    scene[90:93, 40:280] += 90.0
    scene[rng.integers(0, 200, 20), rng.integers(0, 320, 20)] += 120.0
    background = Background(period_s=0.005)
    for _ in range(max(LEARN_AT) + 4):
        excess = background.excess(np.clip(np.rint(scene + rng.normal(0, 2.0, scene.shape)), 0, 255).astype(np.uint8))
    assert background.noise_dn == pytest.approx(2.0, rel=0.15)
    assert (excess > 30).sum() == 0
    spark = scene + rng.normal(0, 2.0, scene.shape)
    spark[150, 100:140] += 60.0
    excess = background.excess(np.clip(np.rint(spark), 0, 255).astype(np.uint8))
    assert excess[150, 102:138].mean() == pytest.approx(62.0, abs=6.0)
    background.reset()
    assert background.excess(np.full((200, 320), 7, np.uint8)).max() == 0


def test_background_follows_flicker_at_once() -> None:
    """A lamp that changes the whole picture from one exposure to the next leaves nothing."""
    rng = np.random.default_rng(SEED)
    slope = np.linspace(0.4, 1.0, 320)
    background = Background(period_s=0.005)
    for index in range(30):
        lamp = 30.0 + 20.0 * math.sin(index * 2.1)
        picture = np.rint(10.0 + lamp * slope + rng.normal(0, 1.5, (200, 320)))
        excess = background.excess(np.clip(picture, 0, 255).astype(np.uint8))
        if index >= 4:
            assert (excess > 12).mean() < 1e-4


def test_another_scene_is_learnt_anew() -> None:
    """A picture that has nothing to do with the last one is judged as a first picture."""
    rng = np.random.default_rng(SEED)
    rough = rng.integers(40, 200, (25, 40)).repeat(8, axis=0).repeat(8, axis=1).astype(np.uint8)
    flat = draw([(100.0, 100.0, 160.0, 104.0, 80.0)])
    fresh = Background(period_s=0.005)
    used = Background(period_s=0.005)
    for _ in range(10):
        used.excess(rough)
    assert np.array_equal(used.excess(flat), fresh.excess(flat))


def test_noise_is_never_below_a_grey_level() -> None:
    """Compression can smooth noise away altogether."""
    background = Background(period_s=0.005)
    background.excess(np.full((64, 64), 30, np.uint8))
    assert background.noise_dn == LEAST_NOISE_DN
    assert background.raw_noise_dn == 0.0


def test_reading_between_pixels() -> None:
    """Bilinear: exact on a plane, dark outside, any number of points."""
    y, x = np.mgrid[0:40, 0:60].astype(np.float32)
    image = 2.0 * x + 3.0 * y
    rng = np.random.default_rng(SEED)
    for count in (0, 1, 1023, 1024, 1025):
        px, py = rng.uniform(0, 58, count), rng.uniform(0, 38, count)
        assert np.allclose(read_levels(image, px, py), 2 * px + 3 * py, atol=0.25)  # remap counts in 1/32 px
    assert read_levels(image, np.array([-5.0, 100.0]), np.array([10.0, 10.0])).tolist() == [0.0, 0.0]


def _radial(rng: np.random.Generator, count: int, *, spread: float = 0.03) -> tuple[NDArray[np.float64], ...]:
    turn, away = rng.normal(0, 0.1, count), rng.uniform(80, 400, count)
    length = (60.0 - 0.05 * away) * np.exp(rng.normal(0, spread, count))
    unit = np.stack([np.cos(turn), np.sin(turn)], axis=1)
    return unit * (away - length / 2)[:, None], unit * (away + length / 2)[:, None]


def test_lengths_learn_how_streaks_shorten() -> None:
    """Typical length follows the distance; short pieces and lines that do not come from the contact do not spoil it."""
    rng = np.random.default_rng(SEED)
    lengths = Lengths((0.0, 0.0))
    assert not lengths.known
    begin, end = _radial(rng, 300)
    cut = rng.uniform(size=300) < 0.3
    end[cut] = begin[cut] + 0.2 * (end[cut] - begin[cut])
    across = np.array([[100.0, -30.0]]).repeat(100, axis=0)
    lengths.learn(begin, end)
    lengths.learn(across, across + np.array([0.0, 60.0]))
    assert lengths.known
    assert lengths.from_contact
    at = np.array([[120.0, 0.0], [250.0, 0.0], [380.0, 0.0]])
    assert np.allclose(lengths.typical_px(at), 60.0 - 0.05 * at[:, 0], rtol=0.08)
    assert 0.1 <= lengths.spread < 0.2
    assert np.abs(lengths.deviation(at, lengths.typical_px(at))).max() == 0.0


def test_lengths_say_nothing_from_little_or_from_elsewhere() -> None:
    """A few streaks teach nothing, nor do many that do not come from the contact point."""
    lengths = Lengths((0.0, 0.0))
    begin, end = _radial(np.random.default_rng(SEED), LEAST_KEPT - 1)
    lengths.learn(begin, end)
    assert not lengths.known
    other = Lengths((0.0, 0.0))
    begin = np.random.default_rng(SEED).uniform(50, 300, (200, 2))
    other.learn(begin, begin + np.array([40.0, -40.0]))
    assert not other.from_contact


@pytest.mark.parametrize("arms", [3, 4, 5, 7])
def test_stars_have_a_candidate_at_their_middle(arms: int) -> None:
    """Whatever its number of arms, a star's middle is looked at, to within three pixels."""
    ridges, pieces = trace(draw([(100.0, 100.0, 160.0, 100.0, 60.0), *star(160.0, 100.0, arms, 16.0)]))  # type: ignore[list-item]
    at = find_candidates(pieces, ridges)
    assert np.hypot(at[:, 0] - 160, at[:, 1] - 100).min() < 3.0


def test_arms_that_begin_apart_meet_in_a_candidate() -> None:
    """The outer parts of arms, as the next exposure shows them, point back to where they came from."""
    lines = [
        (160 + 8 * math.cos(a), 100 + 8 * math.sin(a), 160 + 18 * math.cos(a), 100 + 18 * math.sin(a), 70.0)
        for a in (0.2, 1.5, 2.7, 4.0, 5.3)
    ]
    ridges, pieces = trace(draw(lines))
    at = find_candidates(pieces, ridges)
    assert np.hypot(at[:, 0] - 160, at[:, 1] - 100).min() < 3.0


def test_descriptions_turn_with_the_stream() -> None:
    """A star seen from a contact to its left and the same scene a quarter turn on give one description."""
    picture = draw([(100.0, 100.0, 160.0, 100.0, 60.0), *star(160.0, 100.0, 3, 16.0)], shape=(320, 320))  # type: ignore[list-item]
    ridges, _ = trace(picture)
    turned, _ = trace(np.ascontiguousarray(np.rot90(picture, k=-1)))  # (x, y) -> (319 - y, x)
    one = read_patches(np.array([[160.0, 100.0]]), ridges.blurred, 0.5, (0.0, 100.0))
    two = read_patches(np.array([[219.0, 160.0]]), turned.blurred, 0.5, (219.0, 0.0))
    assert one.shape == (1, len(RING_RADII_PX) * RING_DIRECTIONS)
    assert np.allclose(one, two, atol=0.15)


def test_the_picture_before_is_read_at_the_same_place() -> None:
    """The rings of the picture before are those of a picture, in the same order; without one they are dark."""
    ridges, _ = trace(draw([(100.0, 100.0, 160.0, 100.0, 60.0), *star(160.0, 100.0, 3, 16.0)]))  # type: ignore[list-item]
    at, contact_px = np.array([[160.0, 100.0], [20.0, 30.0]]), (0.0, 100.0)
    whole = read_patches(at, ridges.blurred, ridges.threshold_noise, contact_px)
    whole = whole.reshape(2, len(RING_RADII_PX), RING_DIRECTIONS)[:, list(BEFORE_RINGS)]
    assert np.array_equal(read_before(at, ridges, contact_px), whole.reshape(2, -1))
    assert not read_before(at, None, contact_px).any()
    assert read_before(at, None, contact_px).shape == (2, whole[0].size)


@pytest.mark.parametrize("compiled", [True, False])
def test_a_star_that_the_edge_cuts_is_a_candidate(*, compiled: bool, monkeypatch: pytest.MonkeyPatch) -> None:
    """Where much light is gathered a closer look is taken, at the very edge too, and nowhere twice."""
    if not compiled:
        monkeypatch.setattr("edgewatch.sight.native.LIBRARY", None)
    ridges, pieces = trace(draw([(250.0, 100.0, 317.0, 100.0, 60.0), *star(317.0, 100.0, 6, 14.0)]))  # type: ignore[list-item]
    found = find_candidates(pieces, ridges)
    assert np.hypot(*(found - (317.0, 100.0)).T).min() < 5.0
    dark, none = trace(draw([]))
    assert len(find_candidates(none, dark)) == 0


def test_context_tells_camera_and_crowd() -> None:
    """Each of the camera's numbers moves its own entry, and a candidate among more ends has more of a crowd."""
    _, pieces = trace(draw([(100.0, 100.0, 160.0, 100.0, 60.0), *star(160.0, 100.0, 5, 16.0)]))  # type: ignore[list-item]
    at = np.array([[160.0, 100.0], [20.0, 30.0]])
    plain = read_context(at, pieces, 1.0, make_optics(), has_before=False)
    assert plain.shape == (2, CONTEXT_SIZE)
    assert plain[0, 4] > plain[1, 4]
    for column, other in (
        (0, read_context(at, pieces, 1.0, make_optics(exposure_ms=2.0, fps=1000.0 / 4.5), has_before=False)),
        (1, read_context(at, pieces, 1.0, make_optics(fps=150.0), has_before=False)),
        (2, read_context(at, pieces, 1.0, make_optics(mm_per_px=2.0), has_before=False)),
        (3, read_context(at, pieces, 2.0, make_optics(), has_before=False)),
        (5, read_context(at, pieces, 1.0, make_optics(), has_before=True)),
    ):
        assert np.flatnonzero(~np.isclose(plain, other).all(axis=0)).tolist() == [column]


def test_weights_fit_the_descriptions() -> None:
    """The weights in the package belong to the rings and directions that are read."""
    size = len(RING_RADII_PX) * RING_DIRECTIONS
    nothing = np.zeros((2, size), np.float32)
    before = np.zeros((2, len(BEFORE_RINGS) * RING_DIRECTIONS), np.float32)
    context = np.zeros((2, CONTEXT_SIZE), np.float32)
    seen = np.zeros((2, RINGS_SIFT.shape[1]), np.float32)
    assert learnt.SIFT.shape[1] % SIFT_BLOCK == 0
    assert ((sift_patches(seen) >= 0.0) & (sift_patches(seen) <= 1.0)).all()
    answers = judge_patches(nothing, before, context)
    assert answers.shape == (2, 5)
    assert np.isfinite(answers).all()
    assert judge_patches(nothing[:0], before[:0], context[:0]).shape == (0, 5)
    assert sift_patches(seen[:0]).shape == (0,)


def test_the_net_sees_the_ring_as_closed() -> None:
    """A layer's windows are those of a circular correlation, whatever the memory layout of what it is handed."""
    values = np.random.default_rng(SEED).random((3, 4, RING_DIRECTIONS)).astype(np.float32).transpose(0, 2, 1)
    for reach, step in ((2, 1), (1, 2)):
        found = windows(values, reach, step).reshape(3, RING_DIRECTIONS // step, 2 * reach + 1, 4)
        for place in range(0, RING_DIRECTIONS, step):
            for k in range(2 * reach + 1):
                assert np.array_equal(found[:, place // step, k], values[:, (place + k - reach) % RING_DIRECTIONS])


def test_a_star_is_found_where_it_is() -> None:
    """A star at the end of a streak, in the middle of nowhere, is listed within two pixels, and not as late."""
    lines = [(60.0, 100.0, 160.0, 100.0, 60.0), *star(160.0, 100.0, 6, 14.0)]
    ridges, pieces = trace(draw(lines))  # type: ignore[arg-type]
    found = find_apexes(pieces, ridges, make_optics(contact_px=(0.0, 100.0)), 0.4)
    assert found.sure.size == 1
    assert np.hypot(*(found.at[0] - (160.0, 100.0))) < 2.0
    assert found.late[0] < 0.5


def _glow(**changes: object) -> Glow:
    return Glow(make_optics(**changes), longest_glow_s=0.0035, arm_draw_s=0.00035, late_listed_s=0.0005)


@pytest.mark.parametrize(
    ("fps", "exposure_ms", "listed_ms"),
    [(200.0, 2.5, 2.65), (60.0, 8.0, 8.15), (1000.0, 0.9, 1.05), (1000.0, 0.05, 0.2)],
)
def test_gain_is_the_time_in_which_bursts_get_listed(fps: float, exposure_ms: float, listed_ms: float) -> None:
    """Exposure less drawing time plus what is listed late, and softly below the period."""
    gain = _glow(fps=fps, exposure_ms=exposure_ms).gain
    period_ms = 1000.0 / fps
    assert gain < min(listed_ms, period_ms) / exposure_ms
    assert gain == pytest.approx(SEEN_SHARE * (listed_ms**-4 + period_ms**-4) ** -0.25 / exposure_ms)


def _apexes(*points: tuple[float, float], late: float = 1.0, fresh: float = 0.7) -> Apexes:
    at = np.array(points, dtype=np.float64).reshape(-1, 2)
    return Apexes(at=at, sure=np.ones(len(at)), late=np.full(len(at), late), fresh=np.full(len(at), fresh))


def test_glow_remembers_as_long_as_arms_may_glow() -> None:
    """At 1000 frames/s a burst is old news for four pictures, though its arms have drifted on; then it is forgotten."""
    optics = make_optics(fps=1000.0, exposure_ms=0.9)
    glow = Glow(optics, longest_glow_s=0.0035, arm_draw_s=0.00035, late_listed_s=0.0005)
    lengths = Lengths(optics.contact_px)
    begin, end = _radial(np.random.default_rng(SEED), 100)
    lengths.learn(begin + optics.contact_px, end + optics.contact_px)
    drift = 0.6 * float(lengths.typical_px(np.array([[150.0, 100.0]]))[0]) / 0.9
    assert glow.take(_apexes((150.0, 100.0)), lengths).tolist() == [0]
    assert glow.take(_apexes((150.0 + drift, 100.0), (150.0, 125.0)), lengths).tolist() == [1]
    for _ in range(4):
        assert glow.take(_apexes(), lengths).size == 0
    assert glow.take(_apexes((150.0, 100.0)), lengths).tolist() == [0]
    assert glow.take(_apexes((150.0, 100.0)), lengths).size == 0
    assert glow.take(_apexes((150.0, 100.0), late=0.0), lengths).tolist() == [0], "it went off in this exposure"
    assert glow.take(_apexes((150.0, 100.0), fresh=0.95), lengths).tolist() == [0], "the net is sure that it is news"
    assert glow.take(_apexes((90.0, 100.0), fresh=0.1), lengths).size == 0, "the picture before showed it"


def test_optics_of_any_size_are_looked_at_alike() -> None:
    """Typical lengths are in pixels of the picture: a finer scale gives longer streaks, not others."""
    for scale in (1.0, 2.0):
        lengths = Lengths((0.0, 0.0))
        begin, end = _radial(np.random.default_rng(SEED), 100)
        lengths.learn(begin * scale, end * scale)
        assert lengths.typical_px(np.array([[200.0 * scale, 0.0]]))[0] == pytest.approx(50.0 * scale, rel=0.08)
    assert isinstance(make_optics(), Optics)


@given(st.integers(0, 40), st.lists(st.tuples(st.integers(0, 39), st.integers(0, 39)), max_size=80))
def test_labels_are_those_of_a_general_graph(count: int, pairs: list[tuple[int, int]]) -> None:
    """Points share a label exactly when pairs join them, as scipy's connected components say."""
    kept = sorted({(min(a, b), max(a, b)) for a, b in pairs if a != b and max(a, b) < count})
    i, j = (np.asarray([pair[k] for pair in kept], np.int64) for k in (0, 1))
    label = label_components(i, j, count)
    graph = coo_matrix((np.ones(len(kept)), (i, j)), shape=(count, count))
    number, other = connected_components(graph, directed=False)
    assert len(set(label.tolist())) == number
    assert len(set(zip(label.tolist(), other.tolist(), strict=True))) == number
