"""A bar at the wheel, as the line's own contact says it, against what is seen."""

from __future__ import annotations


class BarLine:
    """Whether the line has reported a bar at the wheel for longer than ``late_s`` and no sparks were seen.

    Once that has happened the station counts as blind until it sees a contact: the bar that went by unseen is no proof
    that the next will be seen.
    """

    def __init__(self, *, late_s: float) -> None:
        """``late_s``: how long after the report sparks may begin (s)."""
        self._late_s = late_s
        self._closed_since_s: float | None = None
        self._missed = False

    def report(self, closed: bool, now_s: float) -> None:
        """The contact opened or closed."""
        if not closed:
            self._closed_since_s = None
        elif self._closed_since_s is None:
            self._closed_since_s = now_s

    def missed(self, in_contact: bool, now_s: float) -> bool:
        """Whether a bar is being missed; ``in_contact``: sparks are seen now."""
        if in_contact:
            self._missed = False
            if self._closed_since_s is not None:
                self._closed_since_s = float("inf")  # seen: this report is answered
        elif self._closed_since_s is not None and now_s - self._closed_since_s > self._late_s:
            self._missed = True
        return self._missed
