"""How full the outbox has become, and how long it will last at the rate of the past hour."""

from __future__ import annotations

from collections import deque

NEARLY = 0.8
"""Told from this share of the room on: at full rate and the default sizes more than a day is left then."""
RELIEVED = 0.7
"""Below this share it is over; between the two nothing changes."""
SAMPLE_S = 60.0
SAMPLES = 61
"""An hour of samples: what comes in varies from bar to bar, not from hour to hour."""


class Filling:
    """Watches the room that unsent messages take; ``update`` as often as wanted, times in seconds, monotonic."""

    def __init__(self) -> None:
        self._past: deque[tuple[float, float]] = deque(maxlen=SAMPLES)
        self._nearly = False

    def update(self, now_s: float, *, unsent: int, used_bytes: float, room_bytes: float) -> str:
        """Return what is to be said while the room is nearly full, else an empty string.

        ``used_bytes``: room that ``unsent`` messages take; ``room_bytes``: what they may take at most.
        """
        if not self._past or now_s - self._past[-1][0] >= SAMPLE_S:
            self._past.append((now_s, used_bytes))
        self._nearly = used_bytes >= (RELIEVED if self._nearly else NEARLY) * room_bytes and unsent > 0
        if not self._nearly:
            return ""
        began_s, began_bytes = self._past[0]
        grown = used_bytes - began_bytes
        text = f"{unsent} unsent, {used_bytes / 1e6:.0f} MB of {room_bytes / 1e6:.0f} MB"
        left = room_bytes - used_bytes
        if left <= 0:
            return f"{text}; it is full"
        if grown <= 0 or now_s <= began_s:
            return f"{text}; not growing"
        hours = left / grown * (now_s - began_s) / 3600
        return f"{text}; at this rate full in {f'{hours:.0f} h' if hours < 100 else f'{hours / 24:.0f} days'}"
