"""What every source keeps to, whatever it is: run on each kind."""

from __future__ import annotations

import contextlib
import dataclasses
import itertools
import os
import threading
from collections.abc import Callable, Iterator
from pathlib import Path

import numpy as np
import pytest

from edgewatch.errors import DeviceError, StalledError
from edgewatch.frames.newest import Newest
from edgewatch.frames.registry import open_source
from edgewatch.frames.reopen import Reopening
from edgewatch.frames.stream import Stream
from edgewatch.frames.values import Frame, Source
from edgewatch.settings import OpticsSettings, RehearsalSettings, Settings, SourceSettings
from tests.clips import noise_pictures, write_clip, write_pictures
from tests.frames.test_camera import Device, set_up
from tests.frames.test_stream import Server

COUNT = 12
STATION = dataclasses.replace(
    Settings(),
    source=SourceSettings(width_px=96, height_px=64),
    optics=OpticsSettings(fps=100.0, exposure_ms=2.5, mm_per_px=8.0, contact_px=(5.0, 30.0)),
    rehearsal=RehearsalSettings(bars=1, foreign=0, contact_s=0.1, pause_s=0.05),
)


def _clip(folder: Path) -> Source:
    return open_source(str(write_clip(folder / "clip.mkv", noise_pictures(COUNT))), STATION)


def _folder(folder: Path) -> Source:
    return open_source(str(write_pictures(folder / "clip", noise_pictures(COUNT))), STATION)


def _file(folder: Path) -> Source:
    (folder / "raw").write_bytes(noise_pictures(COUNT).tobytes())
    return open_source(f"pipe:{folder / 'raw'}", STATION, live=False)


def _fifo(folder: Path) -> Source:
    os.mkfifo(folder / "fifo")
    source = open_source(f"pipe:{folder / 'fifo'}", STATION, live=False)
    writing = os.open(folder / "fifo", os.O_WRONLY)  # at once, as the reading end is open

    def write() -> None:
        with contextlib.suppress(BrokenPipeError), os.fdopen(writing, "wb") as pipe:
            pipe.write(noise_pictures(COUNT).tobytes())

    threading.Thread(target=write).start()
    return source


def _camera(folder: Path) -> Source:
    return set_up(Device(noise_pictures(COUNT)), STATION)


def _newest(folder: Path) -> Source:
    return Newest(_clip(folder), depth=COUNT)


def _reopening(folder: Path) -> Source:
    first = _clip(folder)
    return Reopening(lambda: first, first, clock=lambda: 0.0, chance=lambda: 0.0)


def _rehearsal(folder: Path) -> Source:
    return open_source("rehearsal:", STATION, live=False)


KINDS = (_clip, _folder, _file, _fifo, _camera, _newest, _reopening, _rehearsal)


@pytest.fixture(params=KINDS, ids=lambda kind: kind.__name__.strip("_"))
def opened(request: pytest.FixtureRequest, tmp_path: Path) -> Iterator[Source]:
    """A source of each kind."""
    source: Source = request.param(tmp_path)
    yield source
    source.close()


def read_some(source: Source, count: int = COUNT) -> list[Frame]:
    """The next ``count`` frames, or fewer at the end."""
    frames: list[Frame] = []
    while len(frames) < count and (frame := source.read(10.0)) is not None:
        frames.append(frame)
    return frames


def test_frames_are_mono_of_one_size_and_rise(opened: Source) -> None:
    """8-bit mono of the size that ``info`` says, contiguous; index counts from 0, time rises; nothing is skipped."""
    frames = read_some(opened)
    assert len(frames) == COUNT
    info = opened.info
    for frame in frames:
        assert frame.picture.dtype == np.uint8 and frame.picture.flags.c_contiguous
        assert frame.picture.shape == (info.height_px, info.width_px) == (64, 96)
    assert [frame.index for frame in frames] == list(range(COUNT))
    assert all(a.t_s <= b.t_s for a, b in itertools.pairwise(frames))
    assert not any(frame.skipped for frame in frames)


def test_pictures_are_not_written_over(opened: Source) -> None:
    """A frame keeps its picture while later ones are read."""
    first = opened.read(10.0)
    assert first is not None
    before = first.picture.copy()
    read_some(opened, COUNT - 1)
    assert np.array_equal(first.picture, before)


def test_close_twice_and_read_after(opened: Source) -> None:
    """A second ``close`` does no harm; what is read afterwards is the end or a loss, never anything else."""
    assert opened.read(10.0) is not None
    opened.close()
    opened.close()
    try:
        assert opened.read(0.1) is None or isinstance(opened, Newest)  # frames that waited are still handed on
    except DeviceError as error:
        assert not isinstance(error, StalledError)


@pytest.mark.parametrize("make", KINDS, ids=lambda kind: kind.__name__.strip("_"))
def test_close_from_another_thread_under_a_reader(make: Callable[[Path], Source], tmp_path: Path) -> None:
    """A reader is let go by ``close``, wherever it is."""
    source = make(tmp_path)
    raised: list[BaseException] = []

    def drain() -> None:
        try:
            while source.read(30.0) is not None:
                pass
        except DeviceError:
            pass
        except BaseException as error:  # noqa: BLE001 - to be shown by the test
            raised.append(error)

    reader = threading.Thread(target=drain)
    reader.start()
    source.close()
    reader.join(10.0)
    assert not reader.is_alive() and raised == []


def test_stream_keeps_to_it_too(tmp_path: Path) -> None:
    """A network stream from a server that stays: frames as of the others, and ``close`` under the reader."""
    content = write_clip(tmp_path / "a.nut", noise_pictures(40)).read_bytes()
    server = Server(content, hangs_up=False)
    source = Stream(server.url, silence_s=1.0)
    frames = read_some(source)
    assert [frame.index for frame in frames] == list(range(COUNT))
    assert all(np.array_equal(f.picture, p) for f, p in zip(frames, noise_pictures(40), strict=False))
    source.close()
    source.close()
    assert source.read(0.1) is None
    server.close()
