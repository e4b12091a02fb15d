"""Exhibits: the few pictures of a contact worth keeping if its bar turns out to be nonconforming."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from edgewatch.sight.detections import Detections

APART_S = 0.08
"""Two exhibits lie at least this far apart, so that they do not show the same sparks (s)."""
BURST_WORTH = 10
"""A burst is worth as much as this many streaks to whoever looks at the picture."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Exhibit:
    """One picture with what was seen in it."""

    t_s: float
    picture: NDArray[np.uint8]
    detections: Detections

    @property
    def worth(self) -> int:
        """How much there is to see."""
        return len(self.detections.streaks) + BURST_WORTH * len(self.detections.bursts)


class Exhibits:
    """Keeps the ``most`` worthiest pictures of one contact. Pictures are copied only when kept."""

    def __init__(self, most: int) -> None:
        self._most = most
        self._kept: list[Exhibit] = []

    @property
    def kept(self) -> tuple[Exhibit, ...]:
        """In order of time."""
        return tuple(self._kept)

    def clear(self) -> None:
        """Let go of all."""
        self._kept.clear()

    def offer(self, picture: NDArray[np.uint8], detections: Detections, t_s: float) -> None:
        """Keep the picture if it is worthier than what it would replace."""
        worth = len(detections.streaks) + BURST_WORTH * len(detections.bursts)
        if not worth:
            return
        near = [one for one in self._kept if abs(one.t_s - t_s) < APART_S]
        if near:
            give_way = near
        elif len(self._kept) < self._most:
            give_way = []
        else:
            give_way = [min(self._kept, key=lambda one: one.worth)]
        if any(one.worth >= worth for one in give_way):  # the earlier of two equals stays
            return
        self._kept = [one for one in self._kept if one not in give_way]
        self._kept.append(Exhibit(t_s=t_s, picture=picture.copy(), detections=detections))
        self._kept.sort(key=lambda one: one.t_s)
