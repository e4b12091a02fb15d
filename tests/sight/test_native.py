"""The compiled steps of the sight against their Python forms, and how the library is found, made and refused."""

from __future__ import annotations

import os
import shutil
import subprocess
import sys
from collections.abc import Callable, Iterator
from pathlib import Path
from types import SimpleNamespace
from typing import Any, TypeVar

import cv2
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays
from numpy.typing import NDArray

from edgewatch.sight import native
from edgewatch.sight.background import Background
from edgewatch.sight.burst_net import judge_patches
from edgewatch.sight.bursts import _likeliest
from edgewatch.sight.candidates import find_candidates
from edgewatch.sight.glow import Sorted, sort_lines
from edgewatch.sight.optics import Optics
from edgewatch.sight.ridges import Ridges, find_ridges
from edgewatch.sight.rings import BEFORE_RINGS, CONTEXT_SIZE, RING_DIRECTIONS, RING_RADII_PX, read_patches
from edgewatch.sight.segments import Segments, find_segments
from edgewatch.sight.sight import Sight
from tests.scenes import Look, Scene, Stream, crossing_lines
from tests.sight.test_sight import make_optics

TOP = Path(__file__).parents[2]
SEED = 424_242
Result = TypeVar("Result")


def read_exactly(image: NDArray[np.float32], x: NDArray[np.floating], y: NDArray[np.floating]) -> NDArray[np.float32]:
    """As ``read_levels``, whose ``remap`` places points to 1/32 px only before OpenCV 5."""
    column, row = np.floor(x).astype(np.int64), np.floor(y).astype(np.int64)
    framed = np.pad(image, 1)
    inside = (column >= -1) & (row >= -1) & (column < image.shape[1]) & (row < image.shape[0])
    column, row = np.where(inside, column, -1) + 1, np.where(inside, row, -1) + 1
    right, down = x - np.floor(x), y - np.floor(y)
    framed = np.pad(framed, ((0, 1), (0, 1)))
    upper = framed[row, column] * (1.0 - right) + framed[row, column + 1] * right
    lower = framed[row + 1, column] * (1.0 - right) + framed[row + 1, column + 1] * right
    return np.where(inside, upper * (1.0 - down) + lower * down, 0.0).astype(np.float32)


@pytest.fixture(autouse=True)
def exact_reading(monkeypatch: pytest.MonkeyPatch) -> None:
    """Both forms are held against each other on what they compute, not on how finely a library places points."""
    if int(cv2.__version__.split(".")[0]) < 5:
        for module in ("lone", "steps", "streaks"):
            monkeypatch.setattr(f"edgewatch.sight.{module}.read_levels", read_exactly)


def both(step: Callable[[], Result]) -> tuple[Result, Result]:
    """What the Python form of a step gives, and what its compiled form does."""
    assert native.LIBRARY is not None, f"{native.WHY_NOT}; python deploy/build_sight.py compiles it"
    library = native.LIBRARY
    try:
        native.LIBRARY = None
        plain = step()
    finally:
        native.LIBRARY = library
    return plain, step()


def pictures(optics: Optics, look: Look, seed: int, count: int = 6) -> Iterator[tuple[NDArray[np.uint8], float]]:
    """Pictures of a full stream less their background, and their noise (DN)."""
    background = Background(period_s=optics.period_s)
    for picture, _ in Scene(optics, Stream(), look, seed, (count + 0.5) / optics.fps):
        yield background.excess(picture), background.noise_dn


def trace(excess: NDArray[np.uint8], noise_dn: float) -> tuple[Ridges, Segments]:
    """Ridges and pieces of a picture."""
    ridges = find_ridges(excess, noise_dn)
    return ridges, find_segments(ridges, np.full(excess.size, -1, np.int32))


def same_pieces(plain: Segments, compiled: Segments) -> None:
    """Every value of every piece, in the same order."""
    for name in ("begin", "end", "axis", "length", "height", "bend", "points", "spread"):
        mine, other = getattr(plain, name), getattr(compiled, name)
        assert mine.shape == other.shape, name
        assert mine.dtype == other.dtype, name
        assert np.allclose(mine, other, rtol=1e-4, atol=2e-3), name


LOOKS = [Look(), Look(spread_px=0.7, noise_dn=4.0), Look(shake_px=1.5, hot_pixels=40, spread_px=1.4)]


@pytest.mark.parametrize("look", LOOKS)
def test_ridge_points_and_pieces_are_the_same(look: Look) -> None:
    """Point for point, piece for piece, on full streams: what differs is rounding."""
    for excess, noise in pictures(make_optics(), look, SEED):
        (ridges, pieces), (own, found) = both(lambda excess=excess, noise=noise: trace(excess, noise))
        assert ridges.index.size > 300
        assert np.array_equal(ridges.index, own.index)
        for name in ("x", "y", "cos", "sin", "height", "bend", "offset"):
            assert np.allclose(getattr(ridges, name), getattr(own, name), rtol=1e-4, atol=1e-3), name
        same_pieces(pieces, found)


def test_exact_reading_is_what_it_says() -> None:
    """On a plane it gives the plane, outside nothing; so it is fit to stand in for the library's."""
    image = np.add.outer(3.0 * np.arange(20), 2.0 * np.arange(30)).astype(np.float32)
    rng = np.random.default_rng(SEED)
    x, y = rng.uniform(0, 28.9, 200), rng.uniform(0, 18.9, 200)
    assert np.allclose(read_exactly(image, x, y), 2 * x + 3 * y, atol=1e-4)
    assert read_exactly(image, np.array([-5.0, 100.0]), np.array([10.0, 10.0])).tolist() == [0.0, 0.0]


@pytest.mark.parametrize("look", LOOKS)
def test_candidates_and_what_is_read_about_them_are_the_same(look: Look) -> None:
    """Blobs, meeting points, and the rings about each, at the picture's edge too."""
    optics = make_optics()
    edge = np.array([[0.0, 0.0], [optics.width_px - 1.0, 3.3], [7.9, optics.height_px - 1.0], [-3.0, 50.0]])
    for excess, noise in pictures(optics, look, SEED + 1):
        ridges, pieces = trace(excess, noise)
        plain, compiled = both(lambda r=ridges, p=pieces: find_candidates(p, r))
        assert len(plain) > 20
        assert plain.shape == compiled.shape
        assert np.allclose(plain, compiled, atol=1e-3)
        at = np.concatenate([compiled, edge])
        mine, own = both(lambda r=ridges, a=at: read_patches(a, r.blurred, r.threshold_noise, optics.contact_px))
        # remap may place a point to 1/32 px only, in some versions of OpenCV
        assert np.abs(mine - own).mean() < 0.01


def test_the_net_says_the_same() -> None:
    """Whatever is read about candidates, in this picture and the one before."""
    rng = np.random.default_rng(SEED)
    for count in (0, 1, 7, 40):
        sizes = (len(RING_RADII_PX), len(BEFORE_RINGS))
        rings, before = (np.log1p(rng.exponential(2.0, (count, RING_DIRECTIONS * n))).astype(np.float32) for n in sizes)
        context = rng.normal(0.0, 1.0, (count, CONTEXT_SIZE)).astype(np.float32)
        plain, own = both(lambda r=rings, b=before, c=context: judge_patches(r, b, c))
        assert plain.shape == own.shape
        assert np.allclose(plain, own, atol=1e-4)


def test_the_likeliest_of_neighbours_is_the_same() -> None:
    """Of bursts near to each other and near to ends of pieces or not, equal probabilities among them."""
    optics, rng = make_optics(), np.random.default_rng(SEED)
    for excess, noise in pictures(optics, Look(), SEED + 5):
        _, pieces = trace(excess, noise)
        at = pieces.end[rng.integers(0, len(pieces.end), 60)] + rng.normal(0, 12, (60, 2))
        sure = np.round(rng.uniform(0, 1, 60), 1)
        plain, own = both(lambda a=at, s=sure, p=pieces: _likeliest(a, s, p))
        assert np.array_equal(plain, own)
        assert 0 < own.sum() < 60


def test_arms_are_told_from_streaks_the_same(monkeypatch: pytest.MonkeyPatch) -> None:
    """Within a running stream, where bursts of earlier pictures still glow."""
    seen = {"arms": 0, "cut": 0, "streaks": 0}

    def compared(begin: NDArray[np.float64], end: NDArray[np.float64], *others: Any) -> Sorted:
        plain, own = both(lambda: sort_lines(begin, end, *others))
        for name in ("begin", "end", "streak", "arms"):
            mine, other = getattr(plain, name), getattr(own, name)
            assert mine.dtype == other.dtype
            assert np.allclose(mine, other, atol=1e-6), name
        seen["arms"] += int((~own.streak).sum())
        seen["cut"] += int((own.end != end).any(axis=1).sum())
        seen["streaks"] += int(own.streak.sum())
        return own

    monkeypatch.setattr("edgewatch.sight.listing.sort_lines", compared)
    optics = make_optics()
    sight = Sight(optics)
    plain_only = SimpleNamespace(LIBRARY=None)
    monkeypatch.setattr("edgewatch.sight.listing.native", plain_only)  # the compiled form does not ask ``sort_lines``
    for picture, _ in Scene(optics, Stream(hazard_per_m=3.0), Look(), SEED + 4, 20.5 / optics.fps):
        sight.look(picture)
    assert min(seen.values()) > 3, f"every kind of line has been there: {seen}"


@given(arrays(np.uint8, st.tuples(st.integers(8, 40), st.integers(8, 40))), st.floats(0.5, 30.0))
def test_any_picture_gives_the_same_points(excess: NDArray[np.uint8], noise: float) -> None:
    """Small, full, empty, noise to the last pixel: more points than there is room for at first among them."""
    (ridges, pieces), (own, found) = both(lambda: trace(excess, noise))
    assert set(ridges.index.tolist()) ^ set(own.index.tolist()) <= set(_doubtful(ridges, own))
    if np.array_equal(ridges.index, own.index):
        assert pieces.points.sum() == pytest.approx(found.points.sum(), abs=8)


def _doubtful(one: Ridges, other: Ridges) -> list[int]:
    """Points whose crest lies on the border of its pixel, where rounding decides."""
    places: list[int] = []
    for ridges in (one, other):
        row, column = np.divmod(ridges.index, ridges.blurred.shape[1])
        away = np.maximum(np.abs(ridges.x - column), np.abs(ridges.y - row))
        slack = np.abs(away - 0.65) < 1e-3
        slack |= ridges.bend < 0.0601 * ridges.height
        places += ridges.index[slack].tolist()
    return places


def test_more_points_than_there_is_room_for() -> None:
    """Noise of a whole large picture: the room grows to what is needed."""
    excess = np.random.default_rng(SEED).integers(0, 256, (400, 640)).astype(np.uint8)
    (ridges, _), (own, _) = both(lambda: trace(excess, 0.1))
    assert own.index.size > 10_000
    assert abs(ridges.index.size - own.index.size) < 10


@pytest.mark.slow
@pytest.mark.parametrize("look", LOOKS)
def test_a_stream_is_seen_the_same(look: Look) -> None:
    """From picture to streaks and bursts over a whole stream; a rounding may tip the balance of one in a hundred."""
    optics = make_optics()
    seen: list[list[Any]] = [[], []]
    scene = list(Scene(optics, Stream(), look, SEED + 2, 40.5 / optics.fps))
    for kept, compiled in zip(seen, (False, True), strict=True):
        sight = Sight(optics)
        kept += [_look(sight, picture, compiled) for picture, _ in scene]
    streaks = [sum(len(one.streaks) for one in kept) for kept in seen]
    bursts = [sum(len(one.bursts) for one in kept) for kept in seen]
    assert streaks[0] > 400
    assert streaks[1] == pytest.approx(streaks[0], rel=0.01)
    assert bursts[1] == pytest.approx(bursts[0], rel=0.02)
    track = [sum(one.rate_exposure_px for one in kept) for kept in seen]
    assert track[1] == pytest.approx(track[0], rel=0.01)


def _look(sight: Sight, picture: NDArray[np.uint8], compiled: bool) -> Any:
    library = native.LIBRARY
    assert library is not None, native.WHY_NOT
    try:
        native.LIBRARY = library if compiled else None
        return sight.look(picture)
    finally:
        native.LIBRARY = library


def test_crossing_lines_are_seen_the_same() -> None:
    """Pictures without a past, each by a fresh sight."""
    optics, rng = make_optics(), np.random.default_rng(SEED)
    for angle in (10.0, 45.0, 90.0):
        picture = crossing_lines(optics, Look(), rng, angle_deg=angle)
        plain, own = both(lambda p=picture: Sight(optics).look(p))
        assert np.allclose(plain.streaks, own.streaks, atol=0.01)
        # remap may place the points of a ring to 1/32 px only, in some versions of OpenCV
        assert np.allclose(plain.bursts, own.bursts, atol=0.1)


@pytest.fixture
def sources(tmp_path: Path) -> Path:
    """A copy of the C sources, to spoil."""
    folder = tmp_path / "native"
    folder.mkdir()
    for path in [*native.FOLDER.glob("*.c"), *native.FOLDER.glob("*.h")]:
        shutil.copy(path, folder)
    return folder


BUILD = """
import sys
from pathlib import Path
sys.path.insert(0, sys.argv[1])
import build_sight
build_sight.FOLDER = Path(sys.argv[2])
build_sight.compile_sight.__defaults__ = (Path(sys.argv[2]),)
sys.exit(build_sight.main())
"""


def build(folder: Path, **environment: str) -> subprocess.CompletedProcess[str]:
    """Run deploy/build_sight.py on a folder."""
    words = [sys.executable, "-c", BUILD, str(TOP / "deploy"), str(folder)]
    return subprocess.run(words, env={**os.environ, **environment}, capture_output=True, text=True, check=False)


def test_a_library_of_other_sources_is_refused(sources: Path) -> None:
    """After an update without a new installation the old library is left alone, and the reason says what to do."""
    assert build(sources).returncode == 0
    library, why_not = native.load(sources / native.FILE.name)
    assert library is not None, why_not
    (sources / "ridges.c").write_text((sources / "ridges.c").read_text() + "/* new */\n")
    library, why_not = native.load(sources / native.FILE.name)
    assert library is None
    assert "install again" in why_not


def test_a_library_that_is_none_is_refused(sources: Path) -> None:
    """Missing, cut short or no library at all: the Python forms serve, and the reason is kept."""
    file = sources / native.FILE.name
    assert native.load(file)[0] is None
    assert "no C compiler" in native.load(file)[1]
    file.write_bytes(b"\x7fELF and nothing more")
    library, why_not = native.load(file)
    assert library is None
    assert "does not load" in why_not


def test_no_compiler_and_broken_sources(sources: Path) -> None:
    """Exit statuses of the build, which leaves nothing half made."""
    done = build(sources, CC="no-such-compiler")
    assert done.returncode == 3
    assert "apt-get install gcc" in done.stderr
    (sources / "ridges.c").write_text("int broken(\n")
    done = build(sources)
    assert done.returncode == 1
    assert "ridges.c" in done.stderr
    assert not list(sources.glob("*.bin*"))


def test_both_know_the_same_mark() -> None:
    """The build cannot import the package; its copy of the mark must not drift away."""
    sys.path.insert(0, str(TOP / "deploy"))
    try:
        import build_sight
    finally:
        sys.path.pop(0)
    assert build_sight.source_mark(native.FOLDER) == native.source_mark()
    assert native.FILE.name == build_sight.NAME
