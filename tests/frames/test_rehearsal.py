"""The rehearsal as a source: contract, truth, pace, refusals."""

from __future__ import annotations

import threading
import time

import numpy as np
import pytest

from edgewatch.errors import SettingsError
from edgewatch.frames.registry import open_source
from edgewatch.frames.rehearsal import RehearsalSource, open_rehearsal
from edgewatch.settings import Settings, read_settings


def settings(**rehearsal: object) -> Settings:
    """A short line before a small, slow camera."""
    own = {"bars": 2, "foreign": 1, "contact_s": 0.3, "pause_s": 0.2} | rehearsal
    return read_settings(
        {
            "source": {"width_px": 320, "height_px": 200},
            "optics": {"mm_per_px": 2.0, "contact_px": [15, 100], "fps": 100.0, "exposure_ms": 2.5},
            "rehearsal": own,
        },
        file="test",
    )


def test_every_frame_comes_once_and_then_the_end() -> None:
    """Indices and times without a gap, the size asked for, None at the end and after."""
    source = open_source("rehearsal:", settings(), live=False)
    assert source.info.fps == 100.0
    assert not source.info.live
    frames = []
    while (frame := source.read(1.0)) is not None:
        frames.append(frame)
    assert [frame.index for frame in frames] == list(range(len(frames)))
    assert [frame.t_s for frame in frames] == pytest.approx(np.arange(len(frames)) / 100.0)
    assert {frame.picture.shape for frame in frames} == {(200, 320)}
    assert {frame.skipped for frame in frames} == {0}
    assert source.read(1.0) is None
    source.close()
    source.close()


def test_the_bars_are_in_the_pictures() -> None:
    """Pictures are bright during the true contacts and dark outside; the truth names grades."""
    source = open_rehearsal("", settings(seed=3))
    assert source.bars == []
    bright, times = [], []
    while (frame := source.read(1.0)) is not None:
        bright.append(int((frame.picture > 40).sum()))
        times.append(frame.t_s)
    bars = source.bars
    assert [bar.number for bar in bars] == [1, 2]
    assert sum(bar.foreign for bar in bars) == 1
    assert {bar.grade for bar in bars} == {"C45", "C15"}
    t_s, lit = np.array(times), np.array(bright)
    inside = np.zeros(len(t_s), bool)
    near = np.zeros(len(t_s), bool)
    for bar in bars:
        inside |= (t_s > bar.begin_s + 0.05) & (t_s < bar.end_s - 0.02)
        near |= (t_s > bar.begin_s - 0.02) & (t_s < bar.end_s + 0.15)
    assert np.percentile(lit[inside], 5) > 100
    assert lit[~near].max() <= 10  # hot pixels


def test_same_seed_same_pictures() -> None:
    """Two sources of one configuration are equal picture by picture; another seed is not."""
    one, two, other = (open_rehearsal("", settings(seed=seed)) for seed in (7, 7, 8))
    for _ in range(60):
        a, b, c = one.read(1.0), two.read(1.0), other.read(1.0)
        assert a is not None
        assert b is not None
        assert c is not None
        assert np.array_equal(a.picture, b.picture)
    assert not np.array_equal(a.picture, c.picture)


def test_live_it_keeps_the_cameras_pace() -> None:
    """Thirty frames at a hundred a second take their time; none comes early."""
    source = open_source("rehearsal:", settings(), live=True)
    assert source.info.live
    begin = time.monotonic()
    frames = [source.read(1.0) for _ in range(30)]
    assert time.monotonic() - begin > 0.28
    assert all(frame is not None for frame in frames)


def test_live_a_slow_reader_misses_frames_and_is_told() -> None:
    """After a stop of a tenth of a second the frames of that time are counted as skipped."""
    source = open_rehearsal("", settings(), live=True)
    first = source.read(1.0)
    assert first is not None
    time.sleep(0.12)  # the reader is busy elsewhere
    frame = source.read(1.0)
    assert frame is not None
    assert frame.skipped >= 8
    assert frame.index == first.index + frame.skipped + 1


def test_close_from_another_thread_ends_the_wait() -> None:
    """A live reader that waits for the next frame is let go."""
    slow = read_settings({"optics": {"fps": 0.5}, "rehearsal": {"bars": 1, "foreign": 0}}, file="test")
    source = RehearsalSource(slow, live=True)
    timer = threading.Timer(0.05, source.close)
    timer.start()
    begin = time.monotonic()
    assert source.read(10.0) is None
    assert time.monotonic() - begin < 1.5
    timer.join()


def test_unknown_grades_are_refused_all_at_once() -> None:
    """Key, value and what is allowed, for the expected grade and the foreign ones."""
    with pytest.raises(SettingsError) as caught:
        open_rehearsal("", settings(grade="soap", foreign_grades=["C15", "cheese"]))
    assert len(caught.value.problems) == 2
    assert 'rehearsal.grade = "soap"' in str(caught.value)
    assert 'rehearsal.foreign_grades = "cheese"' in str(caught.value)
    assert '"C45"' in str(caught.value)


def test_anything_after_the_colon_is_refused() -> None:
    """The section says everything; a file name here is a mistake."""
    with pytest.raises(SettingsError, match="rehearsal:line"):
        open_source("rehearsal:line.toml", settings())
