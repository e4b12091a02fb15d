"""The service manager's socket is a real one, bound by the test."""

from __future__ import annotations

import os
import socket
from collections.abc import Iterator
from pathlib import Path

import pytest

from edgewatch.station.watchdog import Watchdog


class Manager:
    """A service manager's end of the socket."""

    def __init__(self, address: str) -> None:
        self.socket = socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM)
        self.socket.bind(address)
        self.socket.setblocking(False)

    def heard(self) -> list[str]:
        """The next datagram's lines; none if nothing has come."""
        try:
            return self.socket.recv(4096).decode().split("\n")
        except BlockingIOError:
            return []


@pytest.fixture(params=["path", "abstract"])
def manager(request: pytest.FixtureRequest, tmp_path: Path) -> Iterator[tuple[Manager, str]]:
    """A manager and the name under which it is announced."""
    path = str(tmp_path / "notify")
    name = path if request.param == "path" else f"@edgewatch-test-{os.getpid()}"
    made = Manager(path if request.param == "path" else "\0" + name[1:])
    yield made, name
    made.socket.close()


class Clock:
    """Moves when told."""

    def __init__(self) -> None:
        self.now_s = 1000.0

    def __call__(self) -> float:
        """The time."""
        return self.now_s


def test_a_life_of_a_service(manager: tuple[Manager, str]) -> None:
    """Ready, alive at half the interval as long as there is progress, silent without, and a word at the end."""
    heard, name = manager
    clock = Clock()
    dog = Watchdog({"NOTIFY_SOCKET": name, "WATCHDOG_USEC": "4000000"}, clock=clock)
    assert dog.interval_s == 4.0
    dog.ready("watching wheel-a")
    assert heard.heard() == ["READY=1", f"MAINPID={os.getpid()}", "STATUS=watching wheel-a"]
    sent = 0
    for _ in range(1000):  # ten seconds at 100 frames a second
        dog.progress()
        sent += heard.heard() == ["WATCHDOG=1"]
        clock.now_s += 0.01
    assert sent == 5
    clock.now_s += 60.0  # the judging hangs: nobody calls, nothing is sent
    assert heard.heard() == []
    dog.progress("bar 12\nconforming")
    assert heard.heard() == ["WATCHDOG=1", "STATUS=bar 12 conforming"]
    clock.now_s += 2.0
    dog.progress("bar 12 conforming")
    assert heard.heard() == ["WATCHDOG=1"]  # the status has not changed
    dog.stopping()
    assert heard.heard() == ["STOPPING=1"]
    dog.close()
    dog.stopping()
    assert heard.heard() == []


@pytest.mark.parametrize(
    "watch",
    [
        {},
        {"WATCHDOG_USEC": "4000000", "WATCHDOG_PID": "1"},  # meant for another process
        {"WATCHDOG_USEC": "soon"},
        {"WATCHDOG_USEC": "0"},
        {"WATCHDOG_USEC": "-5"},
        {"WATCHDOG_USEC": "4000000", "WATCHDOG_PID": "me"},
    ],
)
def test_no_keep_alive_where_none_is_asked_for(manager: tuple[Manager, str], watch: dict[str, str]) -> None:
    """Without a valid interval for this process only ready, status and stopping are sent."""
    heard, name = manager
    dog = Watchdog({"NOTIFY_SOCKET": name, **watch})
    assert dog.interval_s is None
    dog.progress()
    assert heard.heard() == []
    dog.progress("seen")  # too soon after the first
    assert heard.heard() == []
    dog.ready()
    assert heard.heard()[0] == "READY=1"
    dog.close()


def test_own_process_is_meant(manager: tuple[Manager, str]) -> None:
    """WATCHDOG_PID naming this process is as good as none."""
    heard, name = manager
    dog = Watchdog({"NOTIFY_SOCKET": name, "WATCHDOG_USEC": "1000", "WATCHDOG_PID": str(os.getpid())})
    dog.progress()
    assert heard.heard() == ["WATCHDOG=1"]
    dog.close()


@pytest.mark.parametrize("name", ["", "vsock:2:1234", "relative/path", "/nowhere/notify", "@nobody-listens-here"])
def test_nobody_listens(name: str) -> None:
    """Outside a service, with a socket of another family, or with a manager that has gone, nothing happens."""
    dog = Watchdog({"NOTIFY_SOCKET": name, "WATCHDOG_USEC": "1000"})
    dog.ready("here")
    dog.progress()
    dog.stopping()
    dog.close()


def test_manager_that_does_not_read_holds_nothing_up(manager: tuple[Manager, str]) -> None:
    """A full queue is dropped, not waited for."""
    _, name = manager
    dog = Watchdog({"NOTIFY_SOCKET": name})
    for _ in range(5000):
        dog.ready("x" * 300)
    dog.close()
