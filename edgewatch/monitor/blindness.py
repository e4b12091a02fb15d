"""What lasting flags of the pictures say: single odd pictures are no cause, most pictures of a second are."""

from __future__ import annotations

from collections import deque

from edgewatch.sight.detections import Light, PictureFlag

SPAN_S = 1.0
"""Pictures of this long are looked at together (s)."""
RAISE_SHARE = 0.5
"""A flag on more than this share of them is a cause."""
CLEAR_SHARE = 0.2
"""It ends when the share has fallen to this: the gap between the two keeps a cause from chattering."""
LEAST_PICTURES = 5
"""Fewer pictures than this say nothing."""

FLAG_CAUSES = {
    PictureFlag.NO_LIGHT: "no_light",
    PictureFlag.SATURATED: "saturated",
    PictureFlag.DEFOCUSED: "out_of_focus",
    PictureFlag.CROWDED: "crowded",
    PictureFlag.STRAY_LIGHT: "stray_light",
}
"""Which cause each flag becomes when it lasts."""


class Blindness:
    """Rolling share of flagged pictures. Focus and crowding can only be seen where there are streaks, so pictures
    without streaks say nothing of them.
    """

    def __init__(self) -> None:
        self._recent: dict[PictureFlag, deque[tuple[float, bool]]] = {flag: deque() for flag in FLAG_CAUSES}
        self._active: set[PictureFlag] = set()

    def update(self, light: Light, streaks: int, t_s: float) -> frozenset[str]:
        """Take one picture's state; return the causes that last."""
        for flag, recent in self._recent.items():
            if flag in (PictureFlag.DEFOCUSED, PictureFlag.CROWDED) and streaks == 0:
                continue
            recent.append((t_s, bool(light.flags & flag)))
            while recent and not (t_s - SPAN_S < recent[0][0] <= t_s):
                recent.popleft()
            if len(recent) < LEAST_PICTURES:
                continue
            share = sum(flagged for _, flagged in recent) / len(recent)
            if share > RAISE_SHARE:
                self._active.add(flag)
            elif share <= CLEAR_SHARE:
                self._active.discard(flag)
        return frozenset(FLAG_CAUSES[flag] for flag in self._active)
