"""Hands on one line a bar, kept away from the judging: a terminal that is held holds up no frame."""

from __future__ import annotations

import threading
from collections.abc import Callable, Mapping
from typing import Any

from edgewatch.station.backlog import Backlog

MOST_WAITING = 1000
"""Lines that wait at most, half an hour of bars at full rate; beyond it the oldest gives way. The journal has all."""


class Teller:
    """A queue of lines and whoever takes them. ``tell(line)`` may block for as long as it likes; if it raises, nothing
    more is told, ``failure`` is what it raised, and ``on_failure`` is called.
    """

    def __init__(self, tell: Callable[[Mapping[str, Any]], None], *, on_failure: Callable[[], None]) -> None:
        self._tell, self._on_failure = tell, on_failure
        self._backlog: Backlog[Mapping[str, Any]] = Backlog()
        self.failure: Exception | None = None

    def put(self, line: Mapping[str, Any], *, wait: bool = False) -> None:
        """Take one; with ``wait`` (of a source that can wait too) rather than let another give way."""
        backlog = self._backlog
        with backlog.change:
            if wait:
                backlog.change.wait_for(lambda: len(backlog.items) < MOST_WAITING or self.failure is not None)
            if len(backlog.items) >= MOST_WAITING:
                backlog.items.popleft()
            backlog.items.append(line)
            backlog.change.notify_all()

    def flush(self, timeout_s: float | None) -> bool:
        """Wait until all is told, or nothing more will be; say whether one of them is so."""
        backlog = self._backlog
        with backlog.change:
            return backlog.change.wait_for(
                lambda: self.failure is not None or (not backlog.items and not backlog.busy), timeout_s
            )

    def work(self, stop: threading.Event) -> None:
        """Tell until ``stop`` is set and nothing waits; for a supervised thread."""
        while (line := self._backlog.next(stop, take=True)) is not None:
            try:
                self._tell(line)
            except Exception as error:  # noqa: BLE001 - kept for the thread that runs the station to raise
                self.failure = error
                self._on_failure()
                return
            finally:
                self._backlog.done()
