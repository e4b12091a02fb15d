"""Work that waits for one supervised thread."""

from __future__ import annotations

import threading
from collections import deque
from typing import Generic, TypeVar

T = TypeVar("T")

_LOOK_S = 0.5
"""How often an idle worker looks whether it should stop (s); new work wakes it at once."""


class Backlog(Generic[T]):
    """A queue with one worker. Whoever changes ``items`` holds ``change`` and notifies it; ``busy``: the worker has one
    in hand.
    """

    def __init__(self) -> None:
        self.change = threading.Condition()
        self.items: deque[T] = deque()
        self.busy = False

    def next(self, stop: threading.Event, *, take: bool = False) -> T | None:
        """Wait for the oldest item and be busy with it; ``None`` when ``stop`` is set and nothing waits.

        ``take``: it leaves the queue now; otherwise it stays at the front until the worker removes it. Every item
        returned is followed by ``done``.
        """
        with self.change:
            while not self.items:
                if stop.is_set():
                    return None
                self.change.wait(_LOOK_S)
            self.busy = True
            return self.items.popleft() if take else self.items[0]

    def done(self) -> None:
        """The item in hand is worked off, or has failed."""
        with self.change:
            self.busy = False
            self.change.notify_all()

    def flush(self, timeout_s: float) -> bool:
        """Wait until nothing waits and nothing is in hand; say whether that is so."""
        with self.change:
            return self.change.wait_for(lambda: not self.items and not self.busy, timeout_s)
