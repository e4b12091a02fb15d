"""Raw pipes: any cut of the bytes gives the same frames."""

from __future__ import annotations

import dataclasses
import os
import subprocess
import sys
import threading
import time
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from edgewatch.errors import DeviceError, StalledError
from edgewatch.frames.pipe import RawPipe, frame_bytes, open_pipe
from edgewatch.frames.values import SourceInfo
from edgewatch.settings import Settings, SourceSettings
from tests.clips import noise_pictures

STATION = dataclasses.replace(Settings(), source=SourceSettings(width_px=96, height_px=64))


def pipe_of(width: int, height: int, pixel_format: str = "gray8") -> tuple[RawPipe, int]:
    """A source on the reading end of a fresh pipe, and the writing end."""
    reading, writing = os.pipe()
    info = SourceInfo(uri="pipe:test", width_px=width, height_px=height, fps=100.0, live=False)
    return RawPipe(reading, info, pixel_format=pixel_format), writing


def in_background(work: Callable[[], object]) -> threading.Thread:
    """Run ``work`` beside the test."""
    thread = threading.Thread(target=work)
    thread.start()
    return thread


@given(data=st.data(), pixel_format=st.sampled_from(["gray8", "yuv420p"]), width=st.integers(1, 9))
@settings(max_examples=60, deadline=None)
def test_any_cut_of_the_bytes_gives_the_same_frames(data: st.DataObject, pixel_format: str, width: int) -> None:
    """However the writer cuts its frames, they arrive whole, in order, with the luminance only; the rest is said."""
    height, count = 5, 4
    size = frame_bytes(width, height, pixel_format)
    left_over = data.draw(st.integers(0, size - 1))
    content = np.random.default_rng(0).integers(0, 256, size * count + left_over, dtype=np.uint8).tobytes()
    cuts = sorted(data.draw(st.lists(st.integers(0, len(content)), max_size=8)))
    source, writing = pipe_of(width, height, pixel_format)
    seen = []
    for begin, end in zip([0, *cuts], [*cuts, len(content)], strict=True):
        os.write(writing, content[begin:end])
        while (len(seen) + 1) * size <= end:
            frame = source.read(1.0)
            assert frame is not None
            seen.append(frame)
        with pytest.raises(StalledError, match="no whole frame"):
            source.read(0.0)
    os.close(writing)
    if left_over:
        with pytest.raises(DeviceError, match=rf"within frame {count}, after {left_over} of {size} bytes"):
            source.read(1.0)
    assert source.read(1.0) is None
    source.close()
    for index, frame in enumerate(seen):
        luminance = content[index * size : index * size + width * height]
        assert frame.picture.tobytes() == luminance
        assert (frame.index, frame.t_s, frame.picture.shape) == (index, index / 100.0, (height, width))


def test_stall_keeps_what_has_come() -> None:
    """A time-out within a frame loses nothing: the rest completes it."""
    source, writing = pipe_of(4, 4)
    os.write(writing, bytes(range(10)))
    with pytest.raises(StalledError, match="10 of 16 bytes"):
        source.read(0.01)
    os.write(writing, bytes(range(10, 16)))
    frame = source.read(1.0)
    assert frame is not None and frame.picture.tobytes() == bytes(range(16))
    os.close(writing)
    source.close()


def test_close_wakes_a_waiting_reader() -> None:
    """``close`` from another thread ends a read that would have waited for long; a second ``close`` does no harm."""
    source, writing = pipe_of(4, 4)
    results: list[object] = []
    waiting = in_background(lambda: results.append(source.read(60.0)))
    source.close()
    waiting.join(5.0)
    source.close()
    os.close(writing)
    assert results == [None] and not waiting.is_alive()


def test_real_ffmpeg_into_a_fifo(tmp_path: Path) -> None:
    """ffmpeg writes yuv420p into a FIFO that was opened before; without ``live`` its end is the end of the source."""
    pictures = noise_pictures(30)
    fifo = tmp_path / "frames"
    os.mkfifo(fifo)
    station = dataclasses.replace(STATION, source=dataclasses.replace(STATION.source, pixel_format="yuv420p"))
    source = open_pipe(str(fifo), station, live=False)
    with pytest.raises(StalledError):
        source.read(0.01)  # no writer yet
    command = ["ffmpeg", "-y", "-loglevel", "error", "-f", "rawvideo", "-pix_fmt", "gray", "-s", "96x64", "-i", "-"]
    command += ["-vf", "scale=out_range=pc", "-pix_fmt", "yuvj420p", "-f", "rawvideo", str(fifo)]
    with subprocess.Popen(command, stdin=subprocess.PIPE) as grabber:
        assert grabber.stdin is not None
        grabber.stdin.write(pictures.tobytes())
        grabber.stdin.close()
        for index in range(30):
            frame = source.read(10.0)
            assert frame is not None and frame.index == index
            assert np.abs(frame.picture.astype(int) - pictures[index]).max() <= 1
        assert source.read(10.0) is None
    source.close()


def test_writer_of_a_live_fifo_goes_and_comes_back(tmp_path: Path) -> None:
    """A live FIFO without its writer is lost, and serves the next writer when opened anew."""
    fifo = tmp_path / "frames"
    os.mkfifo(fifo)
    for _ in range(2):
        source = open_pipe(str(fifo), STATION, live=True)
        assert source.info.live
        writer = in_background(lambda: fifo.write_bytes(bytes(96 * 64)))
        assert source.read(5.0) is not None
        writer.join()
        with pytest.raises(DeviceError, match="writer has gone"):
            source.read(5.0)
        source.close()


def test_stdin_ends_and_stays_open_for_others() -> None:
    """Frames from stdin end with it; closing the source leaves descriptor 0 alone."""
    program = (
        "import os, dataclasses\nfrom edgewatch.frames.pipe import open_pipe\n"
        "from edgewatch.settings import Settings, SourceSettings\n"
        "station = dataclasses.replace(Settings(), source=SourceSettings(width_px=96, height_px=64))\n"
        "source = open_pipe('-', station, True)\nwhile (frame := source.read(5)): print(frame.index)\n"
        "source.close(); os.fstat(0); print('end')\n"
    )
    done = subprocess.run(
        [sys.executable, "-c", program], input=bytes(96 * 64 * 3), capture_output=True, check=True, timeout=60
    )
    assert done.stdout.split() == [b"0", b"1", b"2", b"end"]


def test_plain_file_of_frames_is_never_live(tmp_path: Path) -> None:
    """A file of raw frames waits for its reader, whatever the pace."""
    path = tmp_path / "frames.gray"
    path.write_bytes(bytes(96 * 64 * 2))
    source = open_pipe(str(path), STATION, live=True)
    assert not source.info.live
    assert source.read(1.0) and source.read(1.0) and source.read(1.0) is None
    source.close()


@pytest.mark.parametrize("rest", ["/nowhere/frames", ".", "", "a\0b"])
def test_what_is_no_pipe_is_refused(rest: str) -> None:
    """A missing path, a folder, an empty name and a name that no file can have are refused in one line."""
    with pytest.raises(DeviceError, match="pipe") as caught:
        open_pipe(rest, STATION)
    assert "\n" not in str(caught.value)


def test_terminal_is_refused() -> None:
    """A terminal as stdin gives no frames: said at once instead of waiting for ever."""
    leader, follower = os.openpty()
    try:
        program = (
            "import sys\nfrom edgewatch.errors import DeviceError\nfrom edgewatch.frames.pipe import open_pipe\n"
            "from edgewatch.settings import Settings\n"
            "try: open_pipe('-', Settings())\nexcept DeviceError as error: print(error)\n"
        )
        done = subprocess.run(
            [sys.executable, "-c", program], stdin=follower, capture_output=True, text=True, check=True, timeout=60
        )
    finally:
        os.close(leader)
        os.close(follower)
    assert "is a terminal; feed it raw gray8 frames" in done.stdout


def test_frame_bytes_of_odd_sizes() -> None:
    """yuv420p halves chroma and rounds up; an unknown layout is refused."""
    assert frame_bytes(640, 400, "gray8") == 256_000
    assert frame_bytes(640, 400, "yuv420p") == 384_000
    assert frame_bytes(5, 3, "yuv420p") == 15 + 2 * 3 * 2
    with pytest.raises(ValueError, match="pixel_format"):
        frame_bytes(5, 3, "rgb24")


def test_time_out_is_kept() -> None:
    """A silent pipe stalls after the time asked for, not before, and not much later."""
    source, writing = pipe_of(4, 4)
    begin_s = time.monotonic()
    with pytest.raises(StalledError):
        source.read(0.05)
    assert 0.05 <= time.monotonic() - begin_s < 5.0
    os.close(writing)
    source.close()
