"""Waits between attempts to reach a lost device: doubling, capped, jittered. Core: the chance is handed in."""

from __future__ import annotations

from collections.abc import Callable


class Backoff:
    """How long to wait before the next attempt.

    The n-th wait is drawn evenly from [half, whole] of ``first_s · 2ⁿ``, capped at ``most_s``: doubling spares a
    device that is coming up, the draw keeps the stations of a plant from calling a server in step after a power cut
    ("equal jitter", M. Brooker, Exponential backoff and jitter, 2015). ``chance`` returns numbers in [0, 1).
    """

    def __init__(self, chance: Callable[[], float], *, first_s: float = 0.25, most_s: float = 15.0) -> None:
        """Start with the shortest wait. Raises ``ValueError`` unless 0 < ``first_s`` <= ``most_s``."""
        if not 0 < first_s <= most_s:
            raise ValueError(f"first_s = {first_s!r}, most_s = {most_s!r}: 0 < first_s <= most_s is needed")
        self._chance, self._first_s, self._most_s = chance, first_s, most_s
        self._whole_s = first_s

    def next_s(self) -> float:
        """Return the next wait (s) and lengthen the one after it."""
        whole_s = self._whole_s
        self._whole_s = min(2.0 * whole_s, self._most_s)
        return whole_s * (0.5 + 0.5 * self._chance())

    def reset(self) -> None:
        """Begin again with the shortest wait: the device works."""
        self._whole_s = self._first_s
