"""Supervised threads: a part that fails is said and started again with back-off, and the others go on."""

from __future__ import annotations

import random
import threading
import time
from collections.abc import Callable

from edgewatch.backoff import Backoff

FIRST_WAIT_S = 0.5
LONGEST_WAIT_S = 60.0
STEADY_S = 300.0
"""A part that ran this long is steady again: its next failure begins with the first wait."""


class Part:
    """One supervised thread.

    ``work(stop)`` runs until it returns or ``stop`` is set. If it raises, ``on_fault(name, error)`` is told from the
    thread and ``work`` runs again after a wait; a return without ``stop`` is the end of the part.
    """

    def __init__(
        self,
        name: str,
        work: Callable[[threading.Event], None],
        *,
        on_fault: Callable[[str, BaseException], None],
        backoff: Backoff | None = None,
    ) -> None:
        self.name = name
        self._work = work
        self._on_fault = on_fault
        self._backoff = backoff or Backoff(random.random, first_s=FIRST_WAIT_S, most_s=LONGEST_WAIT_S)
        self._stop = threading.Event()
        self._thread = threading.Thread(target=self._run, name=name, daemon=True)

    @property
    def alive(self) -> bool:
        """Whether its thread lives."""
        return self._thread.is_alive()

    def start(self) -> None:
        """Start the thread."""
        self._thread.start()

    def stop(self, timeout_s: float) -> bool:
        """Ask it to end and wait; say whether it has ended."""
        self._stop.set()
        if self._thread.is_alive() and self._thread is not threading.current_thread():
            self._thread.join(timeout_s)
        return not self._thread.is_alive()

    def _run(self) -> None:
        while not self._stop.is_set():
            begun = time.monotonic()
            try:
                self._work(self._stop)
                return
            except Exception as error:  # noqa: BLE001 - whatever kills one part must not stay unseen nor kill others
                if time.monotonic() - begun > STEADY_S:
                    self._backoff.reset()
                self._on_fault(self.name, error)
            self._stop.wait(self._backoff.next_s())
