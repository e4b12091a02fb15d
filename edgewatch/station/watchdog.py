"""Talk to the service manager: started, alive, stopping (sd_notify(3), sd_watchdog_enabled(3)).

The keep-alive is driven by real progress, never by a timer: a station whose judging hangs says nothing and is killed
and started again. At its death the kernel releases a relay on a control line, which stops the line where the relay is
energised to run.
"""

from __future__ import annotations

import contextlib
import os
import socket
import time
from collections.abc import Callable, Mapping

_SHARE = 0.5
"""Half the allowed interval between two keep-alives, as sd_watchdog_enabled(3) recommends."""

_LONGEST_STATUS = 400
"""Characters; a status is one line for ``systemctl status``."""


class Watchdog:
    """The service manager's side of the station. Outside a service every method does nothing.

    One thread calls it. Nothing raises: a manager that does not listen is no reason to stop judging.
    """

    def __init__(
        self, environment: Mapping[str, str] = os.environ, *, clock: Callable[[], float] = time.monotonic
    ) -> None:
        """Read ``NOTIFY_SOCKET``, ``WATCHDOG_USEC`` and ``WATCHDOG_PID`` from ``environment``."""
        self._clock = clock
        self._socket: socket.socket | None = None
        self._address = _address(environment.get("NOTIFY_SOCKET", ""))
        self._interval_s = _interval_s(environment)
        self._last_s = float("-inf")
        self._status = ""
        if self._address:
            with contextlib.suppress(OSError):
                self._socket = socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM | socket.SOCK_CLOEXEC)
                self._socket.setblocking(False)  # a full queue must not hold up the judging

    @property
    def interval_s(self) -> float | None:
        """Longest time the manager allows between two keep-alives (s); ``None`` if it does not watch."""
        return self._interval_s

    def ready(self, status: str = "") -> None:
        """The station judges, or is at least able to say why not."""
        self._send("READY=1", f"MAINPID={os.getpid()}", *self._as_status(status))

    def progress(self, status: str = "") -> None:
        """A frame has been judged, or a tick without frames handled. Cheap: most calls send nothing.

        ``status`` is passed on when it changes, at most as often as the keep-alive.
        """
        if self._socket is None:
            return
        now_s = self._clock()
        if now_s - self._last_s < _SHARE * (self._interval_s or 2.0):
            return
        self._last_s = now_s
        alive = ("WATCHDOG=1",) if self._interval_s else ()
        self._send(*alive, *self._as_status(status))

    def stopping(self, status: str = "") -> None:
        """The station ends on purpose."""
        self._send("STOPPING=1", *self._as_status(status))

    def close(self) -> None:
        """Let go of the socket."""
        if self._socket is not None:
            self._socket.close()
            self._socket = None

    def _as_status(self, status: str) -> tuple[str, ...]:
        line = " ".join(status.split())[:_LONGEST_STATUS]
        if not line or line == self._status:
            return ()
        self._status = line
        return (f"STATUS={line}",)

    def _send(self, *lines: str) -> None:
        if self._socket is not None and lines:
            with contextlib.suppress(OSError):  # the manager is gone, or its queue is full
                self._socket.sendto("\n".join(lines).encode("utf-8", "replace"), self._address)


def _address(name: str) -> str:
    """A path, or ``@name`` in the abstract namespace; anything else (``vsock:…``) is not for us."""
    if name.startswith("@"):
        return "\0" + name[1:]
    return name if name.startswith("/") else ""


def _interval_s(environment: Mapping[str, str]) -> float | None:
    """The interval, if there is one and it is meant for this process."""
    try:
        interval_s = int(environment.get("WATCHDOG_USEC", "")) / 1e6
        for_us = int(environment.get("WATCHDOG_PID", os.getpid())) == os.getpid()
    except ValueError:
        return None
    return interval_s if for_us and interval_s > 0 else None
