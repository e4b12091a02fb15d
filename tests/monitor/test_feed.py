"""Each fault of delivery is found, and a sound delivery is never blamed."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from edgewatch.monitor.feed import Feed
from edgewatch.sight.frame import Frame

HEIGHT, WIDTH, FPS = 40, 64, 100.0


def pictures(seed: int = 1, sigma: float = 1.5) -> Iterator[NDArray[np.uint8]]:
    """Dark pictures with a camera's read noise; with ``sigma`` 0 they are all the same."""
    rng = np.random.default_rng(seed)
    while True:
        yield np.clip(rng.normal(8.0, sigma, (HEIGHT, WIDTH)), 0, 255).astype(np.uint8)


class Line:
    """A source that delivers into a feed, at ``FPS`` unless told otherwise."""

    def __init__(self, *, live: bool = True, sigma: float = 1.5) -> None:
        self.feed = Feed(width_px=WIDTH, height_px=HEIGHT, fps=FPS, live=live, stall_s=2.0)
        self.now_s = 50.0
        self.index = 0
        self.seen: set[str] = set()
        self._pictures = pictures(sigma=sigma)

    def run(
        self,
        frames: int,
        *,
        period_s: float = 1 / FPS,
        skipped: int = 0,
        picture: NDArray[np.uint8] | None = None,
        streaks: int = 0,
    ) -> frozenset[str]:
        """Deliver; return the causes after the last frame, collect all in ``seen``."""
        causes: frozenset[str] = frozenset()
        for _ in range(frames):
            self.index += 1 + skipped
            self.now_s += period_s * (1 + skipped)
            shown = next(self._pictures) if picture is None else picture.copy()
            frame = Frame(picture=shown, index=self.index, t_s=self.index / FPS, skipped=skipped)
            causes = self.feed.update(frame, now_s=self.now_s, streaks=streaks)
            self.seen |= causes
        return causes


def test_sound_delivery_is_not_blamed() -> None:
    """Five seconds at the right rate: no cause at any frame."""
    line = Line()
    line.run(500)
    assert line.seen == set()


@settings(deadline=None)
@given(jitter=st.lists(st.floats(-0.009, 0.03), min_size=50, max_size=300))
def test_jitter_of_the_scheduler_is_not_blamed(jitter: list[float]) -> None:
    """Frames taken over late, in bunches, are no wrong rate as long as they are not late for ever."""
    feed = Feed(width_px=WIDTH, height_px=HEIGHT, fps=FPS, live=True, stall_s=2.0)
    source = pictures()
    taken_s = 0.0
    for index, late_s in enumerate(jitter):
        taken_s = max(taken_s, index / FPS + max(late_s, 0.0))
        frame = Frame(picture=next(source), index=index, t_s=index / FPS)
        assert feed.update(frame, now_s=taken_s, streaks=0) == frozenset()


def test_frozen_picture_of_a_noisy_camera() -> None:
    """A camera whose noise never repeats is frozen after half a second of the same picture, and recovers at once."""
    line = Line()
    line.run(200)
    still = next(pictures(seed=9))
    assert line.run(50, picture=still) == frozenset()
    assert line.run(2, picture=still) == {"frozen"}
    assert line.run(1) == frozenset()
    assert line.run(60, picture=still) == {"frozen"}  # a former freeze is not taken for the source's habit


def test_frozen_streaks_of_any_source() -> None:
    """A picture with streaks in it that stays the same is frozen, also where dark pictures repeat (lossy video)."""
    line = Line(sigma=0.0)
    line.run(300)
    assert line.seen == set()
    still = next(pictures(seed=9))
    assert line.run(60, picture=still, streaks=12) == {"frozen"}
    assert line.run(1) == frozenset()


def test_a_picture_with_streaks_shown_again_is_no_evidence() -> None:
    """From its first repeat on, however short the halt and however many there were; dark pictures say nothing."""
    line = Line()
    for _ in range(30):
        line.run(25, streaks=12)
        assert not line.feed.again
        still = next(pictures(seed=9))
        line.run(1, picture=still, streaks=12)
        assert not line.feed.again
        for _ in range(40):
            line.run(1, picture=still, streaks=12)
            assert line.feed.again
        line.run(1, picture=still, streaks=0)
        assert not line.feed.again
    assert line.seen == set()


def test_a_source_that_shows_every_picture_twice_is_taken_as_it_is() -> None:
    """A clip brought to a higher rate: teaching has counted its repeats as well."""
    line = Line(live=False)
    for seed in range(60):
        line.run(2, picture=next(pictures(seed=seed)), streaks=12)
        assert not line.feed.again


def test_frozen_clip() -> None:
    """A freeze recorded into a clip is found as well; its time is that of the frames."""
    line = Line(live=False)
    line.run(100, period_s=0.0001)
    assert line.run(60, picture=next(pictures(seed=9)), period_s=0.0001) == {"frozen"}


def test_dropping_and_recovered() -> None:
    """Half of the frames skipped is dropping; one in twenty is not; after two good seconds it is over."""
    line = Line()
    line.run(300, skipped=0)
    assert line.run(60, skipped=1) == {"dropping"}
    assert line.run(220) == frozenset()
    for _ in range(30):
        line.run(19)
        assert line.run(1, skipped=1) == frozenset()


def test_what_was_skipped_before_the_first_frame_is_no_dropping() -> None:
    """A long start, during which a camera already ran, is forgiven."""
    line = Line()
    line.run(1, skipped=10)
    line.run(100)
    assert line.seen == set()


@pytest.mark.parametrize(("rate", "wrong"), [(60.0, True), (84.0, True), (95.0, False), (106.0, False), (120.0, True)])
def test_wrong_rate(rate: float, wrong: bool) -> None:
    """A rate off by more than 15 % is said, one off by 6 % is not; it ends when the rate is right again."""
    line = Line()
    assert (line.run(400, period_s=1 / rate) == {"wrong_rate"}) is wrong
    assert line.run(400) == frozenset()


def test_skipped_frames_count_for_the_rate() -> None:
    """An overloaded judging that sheds every other frame does not make the camera's rate wrong."""
    line = Line()
    assert line.run(300, skipped=1) == {"dropping"}
    assert "wrong_rate" not in line.seen


def test_stall_and_return() -> None:
    """Silence beyond the limit is a stall; the gap does not count as a wrong rate afterwards."""
    line = Line()
    assert line.feed.silent(line.now_s) == frozenset()
    assert line.feed.silent(line.now_s + 2.1) == {"stalled"}  # never a frame since opening
    line.now_s += 2.1
    line.run(300)
    assert line.feed.silent(line.now_s + 1.9) == frozenset()
    assert line.feed.silent(line.now_s + 2.1) == {"stalled"}
    line.now_s += 30.0
    line.seen.clear()
    line.run(300)
    assert line.seen == set()


@pytest.mark.parametrize("gap_s", [0.3, 0.5, 0.9, 1.3, 1.9])
@pytest.mark.parametrize("skipped", [0, 3])
def test_a_gap_shorter_than_a_stall_is_no_wrong_rate(gap_s: float, skipped: int) -> None:
    """A camera lost for a moment: at no frame afterwards is its rate blamed, also when some frames are known missed."""
    line = Line()
    for _ in range(2):
        line.run(3100)
        line.now_s += gap_s
        line.run(1, skipped=skipped)
    line.run(400)
    assert line.seen == set()


def test_gaps_again_and_again_are_a_wrong_rate() -> None:
    """A source that hangs every other second does not deliver as it should."""
    line = Line()
    for _ in range(4):
        line.run(150)
        line.now_s += 0.8
    assert "wrong_rate" in line.seen


@pytest.mark.parametrize("rate", [60.0, 120.0])
def test_a_gap_hides_no_wrong_rate(rate: float) -> None:
    """A camera that comes back at another rate is said to."""
    line = Line()
    line.run(300)
    line.now_s += 0.9
    assert line.run(500, period_s=1 / rate) == {"wrong_rate"}


def test_wrong_size() -> None:
    """A picture of another size is said, and forgotten with the first right one."""
    line = Line()
    assert line.run(1, picture=np.zeros((HEIGHT, WIDTH + 1), np.uint8)) == {"wrong_size"}
    assert line.run(1) == frozenset()


def test_source_that_waits_has_no_rate() -> None:
    """A clip that is read faster or slower than its rate, or left alone, is neither wrong nor stalled."""
    line = Line(live=False)
    line.run(200, period_s=0.0001)
    line.run(30, period_s=1.0)
    assert line.feed.silent(line.now_s + 3600.0) == frozenset()
    assert line.seen == set()


def test_senseless_limits_are_refused() -> None:
    """A rate or a stall limit of nothing is refused."""
    with pytest.raises(ValueError, match="fps"):
        Feed(width_px=WIDTH, height_px=HEIGHT, fps=0.0, live=True, stall_s=2.0)
