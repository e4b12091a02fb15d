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


class _Recent:
    """The pictures of the last ``SPAN_S`` and how many of them are flagged, counted as they come and go: to sum them
    anew for every picture took twice as long at 100 pictures a second.
    """

    def __init__(self) -> None:
        self._pictures: deque[tuple[float, bool]] = deque()
        self._flagged = 0

    def share(self, t_s: float, flagged: bool) -> float | None:
        """Take a picture; the share of flagged ones, ``None`` while there are too few to say."""
        pictures = self._pictures
        pictures.append((t_s, flagged))
        self._flagged += flagged
        while pictures and not (t_s - SPAN_S < pictures[0][0] <= t_s):
            self._flagged -= pictures.popleft()[1]
        return self._flagged / len(pictures) if len(pictures) >= LEAST_PICTURES else None


class Blindness:
    """Rolling share of flagged pictures. Focus and crowding can only be seen where there are streaks, so pictures
    without streaks say nothing of them.
    """

    def __init__(self) -> None:
        self._recent = {flag: _Recent() for flag in FLAG_CAUSES}
        self._active: set[PictureFlag] = set()

    def update(self, light: Light, streaks: int, t_s: float) -> frozenset[str]:
        """Take one picture's state; return the causes that last."""
        for flag, recent in self._recent.items():
            if flag in (PictureFlag.DEFOCUSED, PictureFlag.CROWDED) and streaks == 0:
                continue
            share = recent.share(t_s, bool(light.flags & flag))
            if share is None:
                continue
            if share > RAISE_SHARE:
                self._active.add(flag)
            elif share <= CLEAR_SHARE:
                self._active.discard(flag)
        return frozenset(FLAG_CAUSES[flag] for flag in self._active)
