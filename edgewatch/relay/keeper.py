"""The keeper of the relay: holds the wanted level through lost ports, and proves it now and then."""

from __future__ import annotations

import threading
import time
from collections.abc import Callable
from dataclasses import dataclass

from edgewatch.backoff import Backoff
from edgewatch.errors import DeviceError
from edgewatch.relay.port import Relay

VERIFY_S = 5.0
"""How often the level is read back while nothing changes (s)."""

_WORDS = {True: "stopped", False: "running"}

_LOOK_S = 0.5
"""How often a sleeping keeper looks whether it should stop (s); a new wanted level wakes it at once."""


@dataclass(frozen=True, slots=True, kw_only=True)
class RelayReport:
    """What became of the wanted level.

    ``kind``: ``switched`` (a new level is in force), ``restored`` (after a loss it is in force again) or ``failed``.
    ``stop``: the wanted level. ``reason``: as given with it. ``read_back``: whether the line is stopped as the board
    says, ``None`` if it cannot tell. ``error``: why it failed, else empty. ``seconds``: from the wish to its proof.
    """

    kind: str
    stop: bool
    reason: str
    read_back: bool | None
    error: str
    seconds: float


_Wish = tuple[bool, str, float]
"""Stop or not, why, and since when (monotonic seconds)."""


class RelayKeeper:
    """Brings the relay to the wanted level and keeps it there.

    ``set`` may be called from any thread and never waits; ``run`` is the work of one supervised thread. A level that
    was replaced before it was applied is not applied. A failure is reported once for each wish; the port is opened
    anew with back-off, or at once for a new wish, the wanted level applied again, and ``restored`` reported.
    """

    def __init__(
        self,
        opener: Callable[[], Relay],
        report: Callable[[RelayReport], None],
        *,
        chance: Callable[[], float],
        verify_s: float = VERIFY_S,
        first_s: float = 0.25,
        most_s: float = 10.0,
    ) -> None:
        """``opener`` raises ``DeviceError`` when it cannot open; ``report`` is called from the keeper's thread;
        ``chance`` gives numbers in [0, 1) for the back-off.
        """
        self._opener, self._report, self._verify_s = opener, report, verify_s
        self._backoff = Backoff(chance, first_s=first_s, most_s=most_s)
        self._changed = threading.Condition()
        self._wanted: _Wish | None = None
        self._tried: _Wish | None = None
        self._applied: _Wish | None = None
        self._failed = False
        self._failure_told_of: _Wish | None = None

    def set(self, stop: bool, reason: str) -> None:
        """Want the line stopped or running; the same level again changes nothing."""
        with self._changed:
            if self._wanted is None or self._wanted[0] != stop:
                self._wanted = (stop, reason, time.monotonic())
                self._changed.notify_all()

    def run(self, stop: threading.Event) -> None:
        """Keep the level until ``stop`` is set; then let go of the relay. May be run again after it raised."""
        relay: Relay | None = None
        self._applied = None
        try:
            while not stop.is_set():
                with self._changed:
                    self._tried = self._wanted
                try:
                    relay = relay or self._opener()
                    self._bring(relay)
                    wait_s = self._verify_s
                except DeviceError as error:
                    if relay is not None:
                        relay.close(leave=True)  # a board that still hears us keeps its level
                    relay, self._applied = None, None
                    self._tell_failure(str(error))
                    wait_s = self._backoff.next_s()
                self._sleep(stop, wait_s)
        finally:
            if relay is not None:
                relay.close()

    def _bring(self, relay: Relay) -> None:
        """Apply the wanted level if it is not in force, prove it, and report what is new."""
        wanted = self._tried
        if wanted is None:
            return
        level, reason, since_s = wanted
        fresh = wanted != self._applied
        if fresh:
            relay.apply(level)
        read_back = relay.read_back()
        if read_back is not None and read_back != level:
            raise DeviceError(f"relay: reads back as {_WORDS[read_back]}, wanted is {_WORDS[level]}")
        self._backoff.reset()
        self._applied = wanted
        if fresh:
            kind = "restored" if self._failed else "switched"
            self._failed = False
            self._report(
                RelayReport(
                    kind=kind,
                    stop=level,
                    reason=reason,
                    read_back=read_back,
                    error="",
                    seconds=time.monotonic() - since_s,
                )
            )

    def _tell_failure(self, error: str) -> None:
        if self._failed and self._failure_told_of == self._tried:
            return
        self._failed, self._failure_told_of = True, self._tried
        level, reason, since_s = self._tried or (False, "", time.monotonic())
        self._report(
            RelayReport(
                kind="failed",
                stop=level,
                reason=reason,
                read_back=None,
                error=error,
                seconds=time.monotonic() - since_s,
            )
        )

    def _sleep(self, stop: threading.Event, seconds: float) -> None:
        """Wait until ``seconds`` have passed, ``stop`` is set, or another level is wanted than was tried last."""
        end_s = time.monotonic() + seconds
        with self._changed:
            while not stop.is_set() and self._wanted == self._tried and (left_s := end_s - time.monotonic()) > 0:
                self._changed.wait(min(left_s, _LOOK_S))
