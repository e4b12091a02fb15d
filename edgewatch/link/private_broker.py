"""A Mosquitto of our own for a rehearsal: on a free loopback port, without anything of it left behind."""

from __future__ import annotations

import shutil
import socket
import subprocess
import tempfile
import time
from pathlib import Path
from types import TracebackType

from edgewatch.errors import DeviceError

_PLACES = ("/usr/sbin", "/usr/local/sbin", "/opt/homebrew/sbin")
"""Where packages put it although an ordinary user's PATH does not look there."""
_UP_S = 5.0
"""Longest wait until it answers."""


def find_mosquitto() -> str | None:
    """Path of the broker program, ``None`` where it is not installed."""
    return shutil.which("mosquitto") or next(
        (found for place in _PLACES if (found := shutil.which("mosquitto", path=place))), None
    )


class PrivateBroker:
    """``with PrivateBroker() as port``: the broker runs; afterwards it is gone. Raises ``DeviceError``."""

    def __init__(self) -> None:
        program = find_mosquitto()
        if program is None:
            raise DeviceError("mosquitto is not installed: no broker can be started")
        self._program = program
        self._folder: tempfile.TemporaryDirectory[str] | None = None
        self._process: subprocess.Popen[bytes] | None = None

    def __enter__(self) -> int:
        self._folder = tempfile.TemporaryDirectory(prefix="edgewatch-broker-")
        with socket.socket() as probe:
            probe.bind(("127.0.0.1", 0))
            port = int(probe.getsockname()[1])
        config = Path(self._folder.name) / "broker.conf"
        config.write_text(f"listener {port} 127.0.0.1\nallow_anonymous true\npersistence false\nlog_type error\n")
        self._process = subprocess.Popen(
            [self._program, "-c", str(config)], stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL
        )
        give_up_s = time.monotonic() + _UP_S
        while time.monotonic() < give_up_s and self._process.poll() is None:
            try:
                socket.create_connection(("127.0.0.1", port), timeout=0.2).close()
            except OSError:
                time.sleep(0.02)  # it is starting; nothing tells when it listens
            else:
                return port
        self.__exit__(None, None, None)
        raise DeviceError(f"{self._program} did not start to listen on a loopback port")

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        if self._process is not None:
            self._process.terminate()
            try:
                self._process.wait(5.0)
            except subprocess.TimeoutExpired:
                self._process.kill()
                self._process.wait()
        if self._folder is not None:
            self._folder.cleanup()
