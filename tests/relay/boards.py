"""Relay boards of our own behind a real pty or a real socket, for tests."""

from __future__ import annotations

import contextlib
import os
import select
import socket
import threading
import tty
from collections.abc import Callable, Iterator
from typing import Any

import serial
import serial.rfc2217

Answer = Callable[[bytes], list[tuple[float, bytes]]]
"""Request -> what is written back: seconds to wait first, then bytes."""


class Board:
    """A board on a pty that switches a relay by the frames it is sent. ``answer`` may be exchanged while it runs."""

    def __init__(self, frames: dict[bytes, bool], answer: Answer) -> None:
        self.frames, self.answer = frames, answer
        self.energised = False
        self.requests: list[bytes] = []
        self._leader, follower = os.openpty()
        tty.setraw(self._leader)
        tty.setraw(follower)
        self.port = os.ttyname(follower)
        self._follower = follower  # held open, so that the station may come and go
        self._stop = threading.Event()
        self._stop_read, self._stop_write = os.pipe()
        self._thread = threading.Thread(target=self._run)
        self._thread.start()

    def _run(self) -> None:
        pending = b""
        while True:
            ready, _, _ = select.select([self._leader, self._stop_read], [], [])
            if self._stop_read in ready:
                return
            pending += os.read(self._leader, 256)
            while (frame := next((f for f in self.frames if pending.startswith(f)), None)) is not None:
                pending = pending[len(frame) :]
                self.energised = self.frames[frame]
                self.requests.append(frame)
                for wait_s, answer in self.answer(frame):
                    if self._stop.wait(wait_s):
                        return
                    os.write(self._leader, answer)

    def pull(self) -> None:
        """Pull the plug: the port is gone for whoever has it open."""
        if not self._stop.is_set():
            self._stop.set()
            os.write(self._stop_write, b"x")
            self._thread.join()
            for fd in (self._leader, self._follower, self._stop_read, self._stop_write):
                os.close(fd)


@contextlib.contextmanager
def board(frames: dict[bytes, bool], answer: Answer) -> Iterator[Board]:
    """A board that is pulled at the end of the test."""
    made = Board(frames, answer)
    try:
        yield made
    finally:
        made.pull()


class LineServer:
    """A serial port with control lines behind RFC 2217 (Telnet COM port control) on a real socket.

    A pty has no control lines, this has. Its RTS is wired to its CTS and DTR to DSR. When the client goes, both fall.
    """

    def __init__(self) -> None:
        self.serial: Any = serial.serial_for_url("loop://", do_not_open=True)
        self.serial.rts = self.serial.dtr = False
        self.serial.open()
        self._listener = socket.create_server(("127.0.0.1", 0))
        self.url = f"rfc2217://127.0.0.1:{self._listener.getsockname()[1]}"
        self._connection: socket.socket | None = None
        self._thread = threading.Thread(target=self._run)
        self._thread.start()

    def write(self, data: bytes) -> None:
        """Called by pyserial's protocol engine with what goes to the client."""
        if self._connection is not None:
            with contextlib.suppress(OSError):
                self._connection.sendall(data)

    def _run(self) -> None:
        while True:
            try:
                self._connection, _ = self._listener.accept()
            except OSError:
                return
            manager = serial.rfc2217.PortManager(self.serial, self)
            self._connection.settimeout(0.02)
            with self._connection:
                while True:
                    try:
                        data = self._connection.recv(1024)
                    except TimeoutError:
                        manager.check_modem_lines()
                        continue
                    except OSError:
                        break
                    if not data:
                        break
                    for _ in manager.filter(data):
                        pass
                    manager.check_modem_lines()
            self.serial.rts = self.serial.dtr = False  # as a driver does when the last one closes the port (HUPCL)

    def close(self) -> None:
        """Stop serving and cut the connection."""
        with contextlib.suppress(OSError):
            self._listener.shutdown(socket.SHUT_RDWR)
        self._listener.close()
        if self._connection is not None:
            with contextlib.suppress(OSError):
                self._connection.shutdown(socket.SHUT_RDWR)
        self._thread.join()
        self.serial.close()
