"""A lost source is opened anew."""

from __future__ import annotations

import contextlib
import dataclasses
import os
import threading
import time
from pathlib import Path

import numpy as np
import pytest

from edgewatch.errors import DeviceError, StalledError
from edgewatch.frames.newest import Newest
from edgewatch.frames.reopen import Reopening, open_lasting
from edgewatch.frames.values import Frame, SourceInfo
from edgewatch.settings import Settings, SourceSettings
from tests.clips import noise_pictures, write_pictures

INFO = SourceInfo(uri="camera:test", width_px=4, height_px=4, fps=10.0, live=True)


class Camera:
    """A camera that delivers ``frames`` and is then pulled out. ``begin_s``: its clock at the first frame."""

    def __init__(self, frames: int, begin_s: float = 0.0, *, ends: bool = False) -> None:
        self.info = INFO
        self.closed = 0
        self._frames, self._begin_s, self._ends, self._index = frames, begin_s, ends, 0

    def read(self, timeout_s: float) -> Frame | None:
        """The next frame."""
        if self._index == self._frames:
            if self._ends:
                return None
            raise DeviceError("camera: unplugged")
        t_s = self._begin_s + self._index / 10.0
        self._index += 1
        return Frame(picture=np.zeros((4, 4), np.uint8), index=self._index - 1, t_s=t_s)

    def close(self) -> None:
        """Count."""
        self.closed += 1


class Bench:
    """A clock that moves only when told, and a row of what each opening gives."""

    def __init__(self, *row: Camera | Exception) -> None:
        self.now_s = 100.0
        self.row = list(row)
        self.opened = 0

    def open(self) -> Camera:
        """The next camera, or its absence."""
        self.opened += 1
        item = self.row.pop(0)
        if isinstance(item, Exception):
            raise item
        return item

    def reopening(self) -> Reopening:
        """The source under test; without jitter waits are halved: 0.5, 1, 2, 2 … s."""
        return Reopening(self.open, self.open(), clock=lambda: self.now_s, chance=lambda: 0.0, first_s=1.0, most_s=4.0)


def next_opening_s(bench: Bench, source: Reopening) -> float:
    """Move the clock until the camera is opened anew; how long that took."""
    begin_s, opened = bench.now_s, bench.opened
    while True:
        with contextlib.suppress(DeviceError):
            source.read(0.0)
        if bench.opened > opened:
            return bench.now_s - begin_s
        bench.now_s += 0.0625


def test_camera_comes_back_with_rising_index_and_time() -> None:
    """Unplugged, not there, there again: attempts wait as the back-off says; index and time go on rising."""
    first, second = Camera(2), Camera(2)
    bench = Bench(first, DeviceError("camera: no such device"), second)
    source = bench.reopening()
    frames = [source.read(0.0), source.read(0.0)]
    with pytest.raises(DeviceError, match="unplugged"):
        source.read(0.0)
    assert first.closed == 1
    with pytest.raises(StalledError, match=r"opened anew in 0\.5 s"):
        source.read(0.0)
    assert bench.opened == 1
    bench.now_s += 0.5
    with pytest.raises(DeviceError, match="no such device"):
        source.read(0.0)
    bench.now_s += 0.99
    with pytest.raises(StalledError):
        source.read(0.0)
    bench.now_s += 0.01
    frames += [source.read(0.0), source.read(0.0)]
    assert [frame.index for frame in frames if frame] == [0, 1, 2, 3]
    assert [frame.t_s for frame in frames if frame] == pytest.approx([0.0, 0.1, 0.1 + 1.5, 0.1 + 1.6])
    assert source.reopened == 1


def test_back_off_is_short_again_after_a_frame() -> None:
    """Opening alone is no success: a camera that opens and gives nothing is not hammered; a frame resets the wait."""
    bench = Bench(Camera(1), Camera(0), Camera(1), Camera(1))
    source = bench.reopening()
    assert source.read(0.0)
    waits = []
    for unplugged in (True, False, True):  # the second camera is lost as soon as it is opened
        if unplugged:
            with pytest.raises(DeviceError, match="unplugged"):
                source.read(0.0)
        waits.append(next_opening_s(bench, source))
    assert waits == [0.5, 1.0, 0.5]


def test_bug_of_a_driver_is_a_loss_that_passes() -> None:
    """Whatever a reader or an opening raises: it is said, closed, and opened anew, also under the reading thread."""

    class Buggy(Camera):
        def read(self, timeout_s: float) -> Frame | None:
            raise ValueError("a bug")

    buggy = Buggy(1)
    bench = Bench(buggy, RuntimeError("another"), Camera(1))
    source = bench.reopening()
    with pytest.raises(DeviceError, match="its reader died: ValueError: a bug"):
        source.read(0.0)
    assert buggy.closed == 1
    bench.now_s += 0.5
    with pytest.raises(DeviceError, match="cannot be opened: RuntimeError: another"):
        source.read(0.0)
    bench.now_s += 1.0
    assert source.read(0.0)


def test_clock_of_a_live_camera_is_left_alone() -> None:
    """Times on the monotonic clock are not moved: they rise by themselves."""
    bench = Bench(Camera(1, 100.0), Camera(1, 107.0))
    source = bench.reopening()
    assert source.read(0.0)
    with pytest.raises(DeviceError):
        source.read(0.0)
    bench.now_s += 7.0
    frame = source.read(0.0)
    assert frame is not None and frame.t_s == 107.0


def test_end_is_an_end_and_close_ends_the_wait() -> None:
    """The end of a source is not a loss; ``close`` ends a long wait before the next attempt."""
    bench = Bench(Camera(0, ends=True))
    assert bench.reopening().read(0.0) is None
    bench = Bench(Camera(0), Camera(1))
    source = bench.reopening()
    with pytest.raises(DeviceError):
        source.read(0.0)
    bench.now_s -= 3600.0  # the attempt is an hour away
    results: list[Frame | None] = []
    waiting = threading.Thread(target=lambda: results.append(source.read(7200.0)))
    waiting.start()
    source.close()
    waiting.join(5.0)
    assert results == [None] and bench.opened == 1


def test_patient_station_waits_for_its_fifo(tmp_path: Path) -> None:
    """A real FIFO that is made only later: lost at first, then served, and served again by the next writer; opening
    never holds the caller up. Without patience its absence is an error at once."""
    fifo = tmp_path / "frames"
    station = dataclasses.replace(Settings(), source=SourceSettings(width_px=96, height_px=64))
    with pytest.raises(DeviceError, match="cannot be opened"):
        open_lasting(f"pipe:{fifo}", station, clock=time.monotonic, chance=lambda: 0.0)
    source = open_lasting(f"pipe:{fifo}", station, clock=time.monotonic, chance=lambda: 0.0, patient=True)
    assert (source.info.width_px, source.info.live) == (96, True)
    with pytest.raises(DeviceError, match="cannot be opened"):
        source.read(5.0)
    os.mkfifo(fifo)
    pictures = noise_pictures(2)
    for index, picture in enumerate(pictures):
        lost = ""
        end_s = time.monotonic() + 20.0
        while index and not lost and time.monotonic() < end_s:  # the first writer has gone: said before another comes
            try:
                source.read(0.1)
            except StalledError:
                continue
            except DeviceError as error:
                lost = str(error)
        assert ("its writer has gone" in lost) == (index == 1)
        writer = threading.Thread(target=lambda shown=picture: fifo.write_bytes(shown.tobytes()))
        writer.start()
        frame = None
        while frame is None and time.monotonic() < end_s:
            try:
                frame = source.read(0.1)
            except StalledError:
                continue
        writer.join()
        assert frame is not None and np.array_equal(frame.picture, picture)
        assert frame.index == index
    source.close()


def test_clip_is_neither_hurried_nor_reopened(tmp_path: Path) -> None:
    """A clip comes as it is."""
    folder = write_pictures(tmp_path / "clip", noise_pictures(1))
    source = open_lasting(str(folder), Settings(), clock=time.monotonic, chance=lambda: 0.0)
    assert not isinstance(source, (Newest, Reopening))
