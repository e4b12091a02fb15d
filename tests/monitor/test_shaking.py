"""Shaking is the scatter of the streaks' origin beyond what each picture's own error explains."""

from __future__ import annotations

import math

import numpy as np
import pytest

from edgewatch.monitor.shaking import LEAST_PICTURES, ShakeWatch
from edgewatch.sight.detections import Detections
from tests.figures.seen import seen

FPS = 100.0


def picture(offset_px: float, error_px: float) -> Detections:
    """A picture whose streaks come from there."""
    one = seen()
    return Detections(
        **{
            name: getattr(one, name)
            for name in ("streaks", "streak_snr", "streak_flags", "bursts", "burst_arms", "burst_flags", "light")
        },
        origin_offset_px=offset_px,
        origin_error_px=error_px,
    )


def shaken(
    watch: ShakeWatch,
    shake_px: float,
    *,
    error_px: float = 0.6,
    pictures: int = 100,
    begin_s: float = 0.0,
    seed: int = 1,
) -> bool:
    """Pictures of a camera that shakes by so much."""
    rng = np.random.default_rng(1)
    for index in range(pictures):
        offset = 1.5 + rng.normal(0.0, math.hypot(shake_px, error_px))
        watch.update(picture(offset, error_px), begin_s + index / FPS)
    return watch.shaking


@pytest.mark.parametrize("error_px", [0.2, 0.6, 1.8])
def test_the_pictures_own_error_is_taken_out(error_px: float) -> None:
    """What the sight is made for is steady, twice that is not; an origin that always lies elsewhere is no shaking. The
    deviation of 400 pictures is known to 3.5 %; four times that, and what the error leaves, is allowed.
    """
    for shake_px, shaking in ((0.0, False), (1.5, False), (3.5, True)):
        watch = ShakeWatch(400.0)
        assert shaken(watch, shake_px, error_px=error_px, pictures=400) is shaking
        assert watch.shake_px == pytest.approx(shake_px, abs=0.14 * shake_px + 0.5 * error_px)


def test_it_ends_with_a_steady_camera_and_holds_between_bars() -> None:
    """Pictures without streaks enough neither raise nor end it; a second of steady contact ends it."""
    watch = ShakeWatch(FPS)
    assert shaken(watch, 4.0)
    for index in range(500):
        assert watch.update(picture(math.nan, math.nan), 1.0 + index / FPS)
    assert not shaken(watch, 0.3, begin_s=6.0)


def test_bars_that_touch_elsewhere_are_no_shaking() -> None:
    """The contact moves by 10 px from bar to bar: each contact is compared with itself."""
    watch = ShakeWatch(FPS)
    for bar in range(6):
        for index in range(40):
            assert not watch.update(picture(10.0 * (bar % 2), 0.5), bar * 1.0 + index / FPS)


def test_too_few_pictures_say_nothing() -> None:
    """Nor do pictures that hardly know where their streaks come from."""
    watch = ShakeWatch(FPS)
    assert not shaken(watch, 8.0, pictures=LEAST_PICTURES - 1)
    assert math.isnan(watch.shake_px)
    assert not shaken(watch, 8.0, error_px=5.0, begin_s=1.0)


def test_a_slow_camera_is_watched_too() -> None:
    """At two pictures a second a pause between pictures is no pause between bars."""
    watch = ShakeWatch(2.0)
    rng = np.random.default_rng(2)
    for index in range(LEAST_PICTURES):
        watch.update(picture(rng.normal(0.0, 5.0), 0.5), index / 2.0)
    assert watch.shaking
