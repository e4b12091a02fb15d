"""Newest frames win, what was shed is counted, and the reader's end is seen."""

from __future__ import annotations

import queue
import threading
from collections.abc import Iterator

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from edgewatch.errors import DeviceError, StalledError
from edgewatch.frames.newest import DEPTH, Newest
from edgewatch.frames.values import Frame, SourceInfo

PICTURE = np.zeros((4, 4), np.uint8)


class Feed:
    """A source fed by hand: frames, ``None`` for the end, exceptions to raise. ``drained`` says that all were read."""

    def __init__(self) -> None:
        self.info = SourceInfo(uri="feed:", width_px=4, height_px=4, fps=100.0, live=True)
        self.items: queue.Queue[Frame | Exception | None] = queue.Queue()
        self.closed = threading.Event()
        self._index = 0

    def give(self, count: int, skipped: int = 0) -> None:
        """Deliver ``count`` frames and wait until the reader has taken them over."""
        for _ in range(count):
            self._index += skipped
            self.items.put(Frame(picture=PICTURE, index=self._index, t_s=self._index / 100.0, skipped=skipped))
            self._index += 1
        self.settle()

    def settle(self) -> None:
        """Wait until everything given was taken over: the reader then waits for the next."""
        self.items.put(StalledError("nothing"))
        self.items.put(StalledError("nothing"))  # taken only after the one before was dealt with
        while not self.items.empty() and not self.closed.wait(0.001):
            pass

    def read(self, timeout_s: float) -> Frame | None:
        """Return or raise the next item."""
        while not self.closed.is_set():
            try:
                item = self.items.get(timeout=0.01)
            except queue.Empty:
                continue
            if isinstance(item, Exception):
                raise item
            return item
        return None

    def close(self) -> None:
        """Let the reader go."""
        self.closed.set()


@pytest.fixture
def feed() -> Iterator[Feed]:
    """A feed that is closed after the test."""
    made = Feed()
    yield made
    made.close()


def test_frames_that_are_awaited_all_arrive(feed: Feed) -> None:
    """A judging that keeps up sees every frame."""
    newest = Newest(feed)
    for index in range(20):
        feed.give(1)
        frame = newest.read(5.0)
        assert frame is not None and (frame.index, frame.skipped) == (index, 0)
    newest.close()


def test_overload_sheds_all_that_wait_and_counts_them(feed: Feed) -> None:
    """The fifth frame sheds the four before it; what the driver itself skipped is added."""
    newest = Newest(feed)
    feed.give(DEPTH + 1, skipped=2)
    frame = newest.read(5.0)
    assert frame is not None
    assert (frame.index, frame.skipped) == (14, DEPTH * 3 + 2)
    newest.close()


@given(steps=st.lists(st.tuples(st.integers(0, 9), st.integers(0, 5), st.integers(0, 2)), max_size=8))
@settings(max_examples=25, deadline=None)
def test_seen_and_skipped_add_up_to_all_delivered(steps: list[tuple[int, int, int]]) -> None:
    """Whatever the rhythm: indices rise, each gap is exactly what is counted as skipped, at most DEPTH wait."""
    feed = Feed()
    newest = Newest(feed)
    expected = 0
    for given_count, taken, skipped in steps:
        feed.give(given_count, skipped)
        for _ in range(taken):
            try:
                frame = newest.read(0.0)
            except StalledError:
                break
            assert frame is not None
            assert frame.index - expected == frame.skipped
            expected = frame.index + 1
    newest.close()


def test_silence_is_a_stall_that_passes(feed: Feed) -> None:
    """No frame in time raises ``StalledError``; the next frame is served as if nothing had been."""
    newest = Newest(feed)
    with pytest.raises(StalledError, match=r"no picture for 0\.01 s"):
        newest.read(0.01)
    feed.give(1)
    assert newest.read(5.0) is not None
    newest.close()


def test_loss_is_told_after_the_last_frame(feed: Feed) -> None:
    """Frames that still wait are handed on before the loss is raised, and it is raised again and again."""
    newest = Newest(feed)
    feed.give(2)
    feed.items.put(DeviceError("camera: unplugged"))
    assert newest.read(5.0) is not None and newest.read(5.0) is not None
    for _ in range(2):
        with pytest.raises(DeviceError, match="unplugged"):
            newest.read(5.0)
    newest.close()


def test_lasting_source_is_read_on_after_a_loss(feed: Feed) -> None:
    """A source that comes back by itself: each loss is raised once, after the frames before it, and reading goes on."""
    newest = Newest(feed, lasting=True)
    feed.give(1)
    feed.items.put(DeviceError("camera: unplugged"))
    feed.settle()
    assert newest.read(5.0) is not None
    with pytest.raises(DeviceError, match="unplugged"):
        newest.read(5.0)
    with pytest.raises(StalledError):
        newest.read(0.01)
    feed.give(1)
    frame = newest.read(5.0)
    assert frame is not None and frame.index == 1
    feed.items.put(RuntimeError("driver bug"))
    with pytest.raises(DeviceError, match="reader died"):
        newest.read(5.0)
    newest.close()


def test_death_of_the_reader_is_a_device_error(feed: Feed) -> None:
    """A bug in a driver does not leave the judging waiting for a thread that is no more."""
    newest = Newest(feed)
    feed.items.put(RuntimeError("driver bug"))
    with pytest.raises(DeviceError, match="reader died: RuntimeError: driver bug"):
        newest.read(5.0)
    newest.close()


def test_end_and_close(feed: Feed) -> None:
    """The end of the source is ``None``; ``close`` closes the source, ends a waiting read, and may be repeated."""
    newest = Newest(feed)
    feed.items.put(None)
    assert newest.read(5.0) is None
    newest.close()
    newest.close()
    assert feed.closed.is_set()
    second = Newest(Feed())
    results: list[Frame | None] = []
    waiting = threading.Thread(target=lambda: results.append(second.read(60.0)))
    waiting.start()
    second.close()
    waiting.join(5.0)
    assert results == [None]


def test_senseless_depth_is_refused(feed: Feed) -> None:
    """A queue of no frames is refused."""
    with pytest.raises(ValueError, match="depth"):
        Newest(feed, depth=0)
