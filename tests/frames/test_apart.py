"""A rehearsal drawn in another process: the same pictures, and nothing of it left behind whatever happens."""

from __future__ import annotations

import dataclasses
import fcntl
import gc
import os
import select
import signal
import subprocess
import sys
import threading
import time
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pytest

from edgewatch.errors import DeviceError, StalledError
from edgewatch.frames import apart
from edgewatch.frames.apart import RendererApart
from edgewatch.frames.rehearsal import RehearsalSource
from edgewatch.frames.renderer import AHEAD, INDEX, Renderer
from tests.frames.test_contract import STATION

LONG = dataclasses.replace(
    STATION, rehearsal=dataclasses.replace(STATION.rehearsal, bars=100, contact_s=0.02, pause_s=1.0)
)
"""So many small pictures that no pipe holds them, soon drawn."""
OPENS = """
import dataclasses, sys
from edgewatch.frames.apart import RendererApart
from tests.frames.test_apart import LONG
renderer = RendererApart(LONG)
print(renderer.pid, flush=True)
"""


@pytest.fixture
def opened() -> Iterator[RendererApart]:
    """The long line."""
    renderer = RendererApart(LONG)
    yield renderer
    renderer.close()


def life(pid: int) -> int:
    """A descriptor that becomes readable when the process ends."""
    return os.pidfd_open(pid)


def wait_gone(descriptor: int) -> bool:
    """Whether it ends within a generous time."""
    ready, _, _ = select.select([descriptor], [], [], 30.0)
    os.close(descriptor)
    return bool(ready)


def drain(renderer: RendererApart, timeout_s: float = 30.0) -> list[int]:
    """Take until the end; the indices. Errors are raised."""
    indices = []
    while (taken := renderer.take(timeout_s)) is not None:
        indices.append(taken[0])
    return indices


def test_the_pictures_are_those_drawn_here() -> None:
    """Bit for bit, all of them, and then the end."""
    there, here = RendererApart(STATION), Renderer(STATION)
    while (expected := here.take()) is not None:
        taken = there.take(30.0)
        assert taken is not None
        assert taken[0] == expected[0]
        assert np.array_equal(taken[1], expected[1])
    assert there.take(30.0) is None
    there.close()
    assert there.take(30.0) is None


def test_it_draws_ahead_a_little_and_waits(opened: RendererApart) -> None:
    """Nobody takes: it stops drawing, with no more drawn than the pipe and ``AHEAD`` hold."""

    def spent() -> str:
        return " ".join(Path(f"/proc/{opened.pid}/stat").read_text(encoding="ascii").rsplit(")", 1)[1].split()[11:13])

    give_up_s, before = time.monotonic() + 60.0, ""
    while (now := spent()) != before:  # it computes no more
        assert time.monotonic() < give_up_s
        before = now
        time.sleep(0.5)
    far = 5000
    order = INDEX.pack(far)
    os.write(opened._process.stdin.fileno(), order)  # type: ignore[union-attr]
    ahead, pipe_bytes = 0, fcntl.fcntl(opened._blocks._fd, fcntl.F_GETPIPE_SZ)
    while (taken := opened.take(30.0)) is not None and taken[0] < far:
        ahead = taken[0] + 1
    assert taken is not None and taken[0] == far
    block = INDEX.size + taken[1].size
    assert ahead <= pipe_bytes // block + AHEAD + 3  # one in each hand, one cut short by the pipe's end


def test_pictures_passed_over_are_dropped_and_not_drawn(opened: RendererApart) -> None:
    """Those drawn ahead are dropped, the next is the one asked for."""
    first = opened.take(30.0)
    opened.go_on_from(4000)
    opened.go_on_from(20)
    taken = opened.take(30.0)
    assert first is not None and taken is not None
    assert (first[0], taken[0]) == (0, 4000)


def test_a_program_that_is_killed_is_a_loss(opened: RendererApart) -> None:
    """What had come is handed on, then the error names the signal, again and again, with its cause."""
    os.kill(opened.pid, signal.SIGKILL)
    with pytest.raises(DeviceError, match="was killed by SIGKILL before picture") as caught:
        drain(opened)
    assert not isinstance(caught.value, StalledError)
    assert isinstance(caught.value.__cause__, subprocess.CalledProcessError)
    with pytest.raises(DeviceError, match="SIGKILL"):
        opened.take(30.0)


@pytest.mark.parametrize(
    ("program", "says"),
    [
        (
            "import sys; sys.stdin.read(9); raise RuntimeError('no paint')",
            "status 1 before picture 0.*: RuntimeError: no",
        ),
        ("raise SystemExit(7)", "ended with status 7"),
        ("import os; os.write(1, b'x' * 4000)", "ended with status 0 before picture 0"),
        ("import sys; sys.stderr.write('y' * 100_000)", "ended with status"),
    ],
    ids=("raises", "exits", "half a picture", "talks"),
)
def test_a_program_that_fails_is_a_loss(program: str, says: str, monkeypatch: pytest.MonkeyPatch) -> None:
    """However it fails, the reader is told what it said last, and never waits."""
    monkeypatch.setattr(apart, "_PROGRAM", program)
    renderer = RendererApart(STATION)
    with pytest.raises(DeviceError, match=says):
        renderer.take(30.0)
    renderer.close()


def test_a_program_that_draws_nothing_is_given_up(monkeypatch: pytest.MonkeyPatch) -> None:
    """Opening fails after a while, and the program is ended."""
    monkeypatch.setattr(apart, "_PROGRAM", "import time; time.sleep(600)")
    monkeypatch.setattr(apart, "START_S", 0.05)
    with pytest.raises(DeviceError, match=r"has drawn nothing for 0\.05 s"):
        RendererApart(STATION)


def test_a_program_that_cannot_be_started_is_a_device_error(monkeypatch: pytest.MonkeyPatch) -> None:
    """As where no more processes are allowed."""
    monkeypatch.setattr(sys, "executable", "/nowhere/python")
    with pytest.raises(DeviceError, match="cannot be started: No such file"):
        RendererApart(STATION)


def test_a_program_that_hangs_stalls(opened: RendererApart) -> None:
    """After what had come, the time-out is kept; when it goes on, so do the pictures, none missing."""
    os.kill(opened.pid, signal.SIGSTOP)
    count = 0
    with pytest.raises(StalledError, match=r"no picture for 0\.05 s"):
        while opened.take(0.05) is not None:
            count += 1
    os.kill(opened.pid, signal.SIGCONT)
    taken = opened.take(30.0)
    assert taken is not None and taken[0] == count


def test_close_lets_a_reader_go_and_ends_the_program(opened: RendererApart) -> None:
    """Also a program that hangs."""
    descriptor = life(opened.pid)
    os.kill(opened.pid, signal.SIGSTOP)
    got: list[object] = []
    reader = threading.Thread(target=lambda: got.append(drain(opened)))
    reader.start()
    opened.close()
    opened.close()
    reader.join(30.0)
    assert len(got) == 1
    assert wait_gone(descriptor)


def test_close_while_it_is_busy() -> None:
    """Right after the start, with nothing taken."""
    renderer = RendererApart(LONG)
    descriptor = life(renderer.pid)
    renderer.close()
    assert wait_gone(descriptor)
    assert renderer.take(30.0) is None


def test_a_source_that_is_forgotten_leaves_nothing() -> None:
    """Neither process nor descriptor, without ``close``."""
    before = len(os.listdir("/proc/self/fd"))  # noqa: PTH208
    source = RehearsalSource(LONG, apart=True)
    assert source.read(30.0) is not None
    renderer = source._renderer
    assert isinstance(renderer, RendererApart)
    descriptor = life(renderer.pid)
    del source, renderer
    gc.collect()
    assert wait_gone(descriptor)
    assert len(os.listdir("/proc/self/fd")) == before  # noqa: PTH208


@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM, signal.SIGHUP])
def test_signals_to_the_group_are_for_us_alone(number: signal.Signals) -> None:
    """A terminal and the service manager signal children too: it goes on drawing for as long as we read."""
    renderer = RendererApart(STATION)
    os.kill(renderer.pid, number)
    assert drain(renderer) == drain_here()
    renderer.close()


def drain_here() -> list[int]:
    """The indices of the short line."""
    here = Renderer(STATION)
    return [taken[0] for taken in iter(here.take, None)]


def start_other(ending: str) -> subprocess.Popen[str]:
    """Another Python that opens the long line, prints the program's process number, and ends as told."""
    return subprocess.Popen(
        [sys.executable, "-W", "error", "-c", OPENS + ending],
        stdin=subprocess.PIPE,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        env={**os.environ, "PYTHONPATH": str(Path(__file__).parents[2])},
    )


def test_it_dies_with_us_even_if_we_are_killed() -> None:
    """SIGKILL leaves no time for a farewell."""
    with start_other("sys.stdin.read()") as other:
        assert other.stdout is not None
        descriptor = life(int(other.stdout.readline()))
        other.kill()
        assert wait_gone(descriptor)


def test_it_dies_with_us_when_we_just_end() -> None:
    """The end of the interpreter, with nothing closed: no warning, no wait."""
    with start_other("sys.stdin.read()") as other:
        assert other.stdout is not None
        descriptor = life(int(other.stdout.readline()))
        _, said = other.communicate(timeout=30.0)
        assert (other.returncode, said) == (0, "")
        assert wait_gone(descriptor)
