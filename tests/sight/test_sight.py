"""The sight as a whole: what it finds, what it leaves alone, and what it says of the picture."""

from __future__ import annotations

import math

import cv2
import numpy as np
import pytest
from numpy.typing import NDArray

from edgewatch.sight import Sight, SightTuning
from edgewatch.sight.detections import BurstFlag, Detections, PictureFlag, StreakFlag
from edgewatch.sight.optics import Optics
from tests.scenes import Look, Scene, Stream, crossing_lines
from tests.scoring import LEAST_LENGTH_PX, LEAST_SNR, Score, far, match_bursts, match_streaks, middles

SEED = 4200
"""Not used in tuning, learning or the benchmark."""


def make_optics(**changes: object) -> Optics:
    """A camera of 320 x 200 px beside the wheel."""
    values: dict[str, object] = {
        "width_px": 320,
        "height_px": 200,
        "mm_per_px": 1.0,
        "contact_px": (10.0, 100.0),
        "direction_deg": 0.0,
        "exposure_ms": 2.5,
        "fps": 200.0,
    }
    return Optics(**(values | changes))  # type: ignore[arg-type]


def draw(
    lines: list[tuple[float, float, float, float, float]],
    *,
    ground: float = 12.0,
    noise: float = 1.5,
    sigma: float = 0.9,
    shape: tuple[int, int] = (200, 320),
    seed: int = SEED,
) -> NDArray[np.uint8]:
    """Lines (x0, y0, x1, y1, height in DN) on a noisy ground, blurred by a point spread of ``sigma`` px."""
    light = np.zeros(shape)
    for x0, y0, x1, y1, height in lines:
        count = int(np.hypot(x1 - x0, y1 - y0) * 4) + 1
        s = (np.arange(count) + 0.5) / count
        x, y = x0 + s * (x1 - x0), y0 + s * (y1 - y0)
        weight = height * math.sqrt(2 * math.pi) * sigma * np.hypot(x1 - x0, y1 - y0) / count
        ix, iy = np.floor(x).astype(int), np.floor(y).astype(int)
        fx, fy = x - ix, y - iy
        for dx, dy, share in (
            (0, 0, (1 - fx) * (1 - fy)),
            (1, 0, fx * (1 - fy)),
            (0, 1, (1 - fx) * fy),
            (1, 1, fx * fy),
        ):
            inside = (ix + dx >= 0) & (iy + dy >= 0) & (ix + dx < shape[1]) & (iy + dy < shape[0])
            np.add.at(light, (iy[inside] + dy, ix[inside] + dx), (weight * share)[inside])
    light = cv2.GaussianBlur(light, (0, 0), sigma)
    picture = light + ground + np.random.default_rng(seed).normal(0, noise, shape)
    return np.clip(np.rint(picture), 0, 255).astype(np.uint8)


def star(
    x: float, y: float, arms: int, length: float, height: float = 60.0, turn: float = 0.3
) -> list[tuple[float, ...]]:
    """Lines that run out from a point."""
    angles = turn + np.arange(arms) * 2 * math.pi / arms
    return [(x, y, x + length * math.cos(a), y + length * math.sin(a), height) for a in angles]


def embers(x: float, y: float, arms: int = 6, flown: float = 0.0) -> list[tuple[float, float, float, float, float]]:
    """Outer parts of arms round an empty middle; ``flown`` px further out they have faded by a tenth for each."""
    angles = 0.3 + np.arange(arms) * 2 * math.pi / arms
    near, far, level = 7.0 + flown, 14.0 + flown, 60.0 * (1.0 - 0.1 * flown)
    ways = zip(np.cos(angles).tolist(), np.sin(angles).tolist(), strict=True)
    return [(x + near * u, y + near * v, x + far * u, y + far * v, level) for u, v in ways]


def same(a: Detections, b: Detections) -> bool:
    """Whether two detections agree to the last bit."""
    names = ("streaks", "streak_snr", "streak_flags", "bursts", "burst_arms", "burst_flags")
    return all(np.array_equal(getattr(a, n), getattr(b, n)) for n in names) and a.rate_bursts == b.rate_bursts


def test_first_picture_shows_a_streak_to_a_fraction_of_a_pixel() -> None:
    """Without any past a line is found where it was drawn, its wheel end first, with about its height."""
    truth = (80.3, 90.6, 140.8, 84.2)
    seen = Sight(make_optics()).look(draw([(*truth, 45.0)], noise=1.5))
    assert seen.streaks.shape == (1, 4)
    assert np.allclose(seen.streaks[0], truth, atol=1.2)
    middle = middles(seen.streaks)[0] - middles(np.array([truth]))[0]
    assert np.hypot(*middle) < 0.6
    assert seen.streak_snr[0] == pytest.approx(30.0, rel=0.25)
    assert len(seen.bursts) == 0
    assert seen.rate_exposure_px > 0.0


@pytest.mark.parametrize("degrees", [0.0, 90.0, 180.0, -135.0])
def test_first_end_is_the_one_nearer_the_wheel(degrees: float) -> None:
    """Whatever way the stream goes, each streak begins at its wheel end."""
    c, s = math.cos(math.radians(degrees)), math.sin(math.radians(degrees))
    optics = make_optics(direction_deg=degrees, contact_px=(160 - 90 * c, 100 - 90 * s))
    line = (160 - 20 * c, 100 - 20 * s, 160 + 25 * c, 100 + 25 * s, 60.0)
    (found,) = Sight(optics).look(draw([line])).streaks
    assert np.allclose(found, line[:4], atol=1.5)


def test_crossing_and_touching_streaks_stay_whole() -> None:
    """A streak that crosses another, or runs along its end, keeps both ends."""
    lines = [(60, 80, 130, 110, 60.0), (60, 112, 130, 78, 60.0), (180, 60, 240, 66, 50.0), (225, 66, 285, 71, 80.0)]
    optics = make_optics(contact_px=(-400.0, 100.0))
    seen = Sight(optics).look(draw([tuple(map(float, line)) for line in lines]))  # type: ignore[misc]
    assert len(match_streaks(np.array([line[:4] for line in lines]), seen.streaks)) == 4
    assert len(seen.bursts) == 0


def test_star_is_one_burst_and_its_arms_are_no_streaks() -> None:
    """A streak that ends in a star: one burst at its end, one streak, listed in this picture and never again."""
    sight = Sight(make_optics(fps=1000.0, exposure_ms=0.9))
    lines = [(70.0, 100.0, 130.0, 100.0, 60.0), *star(130.0, 100.0, 5, 18.0)]
    seen = sight.look(draw(lines))  # type: ignore[arg-type]
    assert len(seen.bursts) == 1
    assert np.hypot(*(seen.bursts[0] - (130.0, 100.0))) < 4.0
    assert seen.burst_arms[0] >= 3
    assert not seen.burst_flags[0] & BurstFlag.LATE
    assert seen.rate_bursts == 1
    again = sight.look(draw(embers(131.0, 100.0), seed=SEED + 1))
    assert len(again.bursts) == 0


@pytest.mark.parametrize(
    ("fps", "exposure_ms", "flown"),
    [(1000.0, 0.9, 0.0), (1000.0, 0.9, 1.0), (1000.0, 0.9, 3.0), (200.0, 2.5, 0.0), (200.0, 2.5, 1.0)],
)
def test_embers_are_late_and_news_only_once(fps: float, exposure_ms: float, flown: float) -> None:
    """The outer parts of arms round an empty middle: a burst that went off before the exposure; listed once, whether
    they fly on and fade, as arms do, or stay where they are. At 200 pictures a second no arm glows in two that are both
    after its burst (5 ms; arms glow for 3.5), so there what has moved is another burst, and only what has not is old.
    """
    sight = Sight(make_optics(fps=fps, exposure_ms=exposure_ms))
    seen = sight.look(draw(embers(130.0, 100.0)))
    assert len(seen.bursts) == 1
    assert seen.burst_flags[0] & BurstFlag.LATE
    assert len(sight.look(draw(embers(130.0 + 0.5 * flown, 100.0, flown=flown), seed=SEED + 1)).bursts) == 0


def test_memory_of_bursts_ends_and_reset_forgets() -> None:
    """Embers at the place of a burst are news once nothing of it can glow, and at once after a reset."""
    picture = draw([(70.0, 100.0, 130.0, 100.0, 60.0), *star(130.0, 100.0, 5, 18.0)])  # type: ignore[list-item]
    glowing, empty = draw(embers(130.0, 100.0), seed=SEED + 3), draw([], seed=SEED + 2)
    sight = Sight(make_optics(fps=1000.0, exposure_ms=0.9))
    assert len(sight.look(picture).bursts) == 1
    assert len(sight.look(glowing).bursts) == 0
    for _ in range(4):
        sight.look(empty)
    assert len(sight.look(glowing).bursts) == 1
    sight.reset()
    assert len(sight.look(glowing).bursts) == 1


def test_a_second_spark_may_burst_where_one_did() -> None:
    """A streak that ends in a star is a burst of this exposure, whatever went off there before."""
    picture = draw([(70.0, 100.0, 130.0, 100.0, 60.0), *star(130.0, 100.0, 5, 18.0)])  # type: ignore[list-item]
    sight = Sight(make_optics())
    assert [len(sight.look(picture).bursts) for _ in range(2)] == [1, 1]


def test_slow_camera_remembers_nothing() -> None:
    """At 60 frames/s no arm outlasts the time between exposures: every picture's bursts are its own."""
    sight = Sight(make_optics(fps=60.0, exposure_ms=8.0))
    picture = draw([(70.0, 100.0, 130.0, 100.0, 60.0), *star(130.0, 100.0, 5, 18.0)])  # type: ignore[list-item]
    assert [len(sight.look(picture).bursts) for _ in range(2)] == [1, 1]


def test_looking_is_deterministic_and_leaves_the_picture_alone() -> None:
    """The same pictures give the same detections, bit by bit, and are not written to."""
    stream = Stream(sparks_per_s=1500.0, hazard_per_m=2.0)
    pictures = [p for p, _ in Scene(make_optics(), stream, Look(), SEED, 0.03)]
    first, second = Sight(make_optics()), Sight(make_optics())
    for picture in pictures:
        before = picture.copy()
        picture.setflags(write=False)
        assert same(first.look(picture), second.look(picture))
        assert np.array_equal(picture, before)
    first.reset()
    assert same(first.look(pictures[0]), Sight(make_optics()).look(pictures[0]))


@pytest.mark.parametrize("fill", [0, 12, 255])
def test_empty_pictures_give_empty_arrays(fill: int) -> None:
    """A flat picture, black to white: nothing seen, every field of its dtype and shape, no warning."""
    seen = Sight(make_optics()).look(np.full((200, 320), fill, np.uint8))
    assert seen.streaks.shape == (0, 4)
    assert seen.streaks.dtype == np.float32
    assert seen.streak_snr.dtype == np.float32
    assert seen.streak_flags.dtype == np.uint8
    assert seen.bursts.shape == (0, 2)
    assert seen.bursts.dtype == np.float32
    assert seen.burst_arms.dtype == np.int16
    assert seen.burst_flags.dtype == np.uint8
    assert seen.rate_bursts == 0
    assert seen.rate_exposure_px == 0.0
    assert math.isnan(seen.light.streak_width_px)
    assert math.isnan(seen.light.streak_peak_dn)


@pytest.mark.parametrize(
    "picture",
    [
        np.zeros((200, 319), np.uint8),
        np.zeros((200, 320), np.float32),
        np.zeros((200, 320, 3), np.uint8),
        None,
    ],
)
def test_wrong_pictures_are_value_errors(picture: object) -> None:
    """Another shape, another type, no picture at all."""
    with pytest.raises(ValueError, match="picture"):
        Sight(make_optics()).look(picture)  # type: ignore[arg-type]


def test_smallest_picture_is_looked_at() -> None:
    """Sixteen by sixteen pixels are allowed by the optics, so they are looked at, lit or not."""
    sight = Sight(make_optics(width_px=16, height_px=16))
    rng = np.random.default_rng(SEED)
    for _ in range(12):
        assert len(sight.look(rng.integers(0, 256, (16, 16)).astype(np.uint8)).streaks) >= 0


def test_random_pictures_raise_nothing() -> None:
    """White noise at full contrast is no picture of sparks but must not trip anything."""
    sight = Sight(make_optics())
    rng = np.random.default_rng(SEED)
    for _ in range(3):
        seen = sight.look(rng.integers(0, 256, (200, 320)).astype(np.uint8))
        assert np.isfinite(seen.streaks).all()


@pytest.mark.parametrize(
    "name", ["least_snr", "least_length_px", "least_sure", "rate_sure", "longest_glow_s", "arm_draw_s", "late_listed_s"]
)
@pytest.mark.parametrize("value", [0.0, -1.0, math.nan, math.inf])
def test_tuning_out_of_range_names_the_field(name: str, value: float) -> None:
    """Tuning is checked when built."""
    with pytest.raises(ValueError, match=name):
        SightTuning(**{name: value})


def test_streaks_at_the_edge_are_flagged() -> None:
    """A streak that leaves the picture has its far end flagged, one that enters it its wheel end."""
    seen = Sight(make_optics()).look(
        draw([(270, 60, 340, 62, 70.0), (-20, 140, 40, 139, 70.0), (100, 100, 150, 100, 70.0)])
    )
    flags = {round(float(line[1]), -1): int(flag) for line, flag in zip(seen.streaks, seen.streak_flags, strict=True)}
    assert flags == {60.0: StreakFlag.CUT_END, 140.0: StreakFlag.CUT_BEGIN, 100.0: 0}


def test_moving_the_picture_moves_the_streaks() -> None:
    """A scene drawn elsewhere gives the same streaks elsewhere."""
    lines = [(60.0, 40.0, 110.0, 46.0, 60.0), (80.0, 90.0, 140.0, 84.0, 60.0)]
    moved = [(a + 50.25, b + 30.5, c + 50.25, d + 30.5, h) for a, b, c, d, h in lines]
    one = Sight(make_optics()).look(draw(lines, noise=1.0)).streaks
    two = Sight(make_optics(contact_px=(60.25, 130.5))).look(draw(moved, noise=1.0)).streaks
    assert len(one) == len(two) == 2
    assert np.allclose(np.sort(one, axis=0), np.sort(two, axis=0) - np.array([50.25, 30.5] * 2), atol=0.8)


def test_picture_states_are_named() -> None:
    """No light, saturated, out of focus, stray light: each flag comes from its own picture, a good one has none."""
    lines = [
        (40.0 + 150 * (k % 2), 24.0 + 45 * (k // 2), 110.0 + 150 * (k % 2), 28.0 + 45 * (k // 2), 90.0)
        for k in range(8)
    ]

    def flags(picture: NDArray[np.uint8], times: int = 1) -> PictureFlag:
        sight = Sight(make_optics())
        return [sight.look(picture).light.flags for _ in range(times)][-1]

    assert flags(draw(lines)) == PictureFlag.NONE
    assert flags(np.zeros((200, 320), np.uint8)) == PictureFlag.NO_LIGHT
    blown = draw(lines)
    blown[:40] = 255
    assert flags(blown) & PictureFlag.SATURATED
    assert flags(draw(lines, sigma=3.2), times=4) & PictureFlag.DEFOCUSED  # known after 24 lines
    assert flags(draw(lines, sigma=1.5), times=4) == PictureFlag.NONE
    assert flags(draw(lines, ground=170.0)) & PictureFlag.STRAY_LIGHT
    assert not flags(draw([])) & PictureFlag.NO_LIGHT


def test_bright_cores_of_streaks_are_no_saturation() -> None:
    """Forty lines at full scale, three pixels wide, at any direction: each is seen, and none hides another."""
    for degrees in (0, 30, 45, 90):
        picture = np.full((200, 320), 10, np.uint8)
        for k in range(40):
            x, y = 20 + 75 * (k % 4), 10 + 19 * (k // 4)
            c, s = np.cos(np.radians(degrees)), np.sin(np.radians(degrees))
            cv2.line(picture, (x, y), (round(x + 12 * c), round(y + 12 * s)), 255, 3)
        assert not Sight(make_optics()).look(picture).light.flags & PictureFlag.SATURATED


def test_width_of_streaks_is_measured() -> None:
    """Full width at half maximum of the lines drawn, 2.355 times their sigma, within a fifth."""
    lines = [
        (40.0 + 150 * (k % 2), 24.0 + 45 * (k // 2), 110.0 + 150 * (k % 2), 28.0 + 45 * (k // 2), 90.0)
        for k in range(8)
    ]
    for sigma in (0.8, 1.2, 1.8):
        light = Sight(make_optics()).look(draw(lines, sigma=sigma)).light
        assert light.streak_width_px == pytest.approx(2.355 * sigma, rel=0.2)
        assert light.noise_dn == pytest.approx(1.5, rel=0.15)
        assert light.background_dn == pytest.approx(12.0, abs=1.0)


@pytest.mark.slow
def test_dark_scene_stays_dark() -> None:
    """Flicker, haze and hot pixels, no spark: nothing in two hundred pictures."""
    look = Look(haze_dn=30.0, flicker_dn=12.0, hot_pixels=30)
    sight = Sight(make_optics())
    for picture, _ in Scene(make_optics(), Stream(sparks_per_s=0.0), look, SEED, 200.5 / 200.0):
        seen = sight.look(picture)
        assert len(seen.streaks) == 0
        assert len(seen.bursts) == 0


@pytest.mark.slow
def test_crossings_are_no_bursts() -> None:
    """Two and three lines crossing at 30 to 90 degrees: below two in a hundred."""
    rng = np.random.default_rng(SEED)
    optics = make_optics(width_px=640, height_px=400)
    false = 0
    for angle in (30.0, 45.0, 60.0, 90.0) * 6:
        false += len(Sight(optics).look(crossing_lines(optics, Look(), rng, angle_deg=angle)).bursts)
    assert false < 0.02 * 24 * 12


@pytest.mark.slow
def test_streaks_and_bursts_of_an_unseen_stream() -> None:
    """A floor under the figures that the benchmark measures, on scenes of the second judge."""
    optics = make_optics(width_px=640, height_px=400, contact_px=(20.0, 200.0))
    streaks, bursts, fresh = Score(), Score(), Score()
    sight = Sight(optics)
    stream = Stream(hazard_per_m=1.5, kick=0.8, sparks_per_s=1500.0)
    for picture, truth in Scene(optics, stream, Look(), SEED, 40.5 / 200.0):
        seen = sight.look(picture)
        length = np.hypot(*(truth.streaks[:, 2:] - truth.streaks[:, :2]).T)
        real = truth.streaks[(truth.snr >= LEAST_SNR) & (length > LEAST_LENGTH_PX)]
        real, found = real[far(middles(real), (20, 200))], seen.streaks[far(middles(seen.streaks), (20, 200))]
        streaks.add(len(match_streaks(real, found)), len(real), len(found))
        shown = seen.bursts[far(seen.bursts, (20, 200))]
        outside = far(truth.bursts, (20, 200))
        burst = truth.bursts[outside]
        bursts.add(len(match_bursts(burst, shown)), len(burst), len(shown))
        burst = truth.bursts[outside & ~truth.late]
        fresh.add(len(match_bursts(burst, shown)), len(burst), len(shown))
    assert streaks.f1 > 0.85
    assert bursts.precision > 0.75
    assert fresh.recall > 0.5
