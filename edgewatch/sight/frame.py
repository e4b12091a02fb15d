"""One frame: a picture with its time."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Frame:
    """One picture with its time.

    ``picture``: uint8 (height, width), mono. ``index``: counts every frame the source delivered, from 0.
    ``t_s``: time of the exposure on the source's own clock (s): ``index / fps`` for clips, pipes and rehearsals, the
    monotonic clock for live sources. ``skipped``: frames that were delivered since the last one handed on and that
    nobody looked at.
    """

    picture: NDArray[np.uint8]
    index: int
    t_s: float
    skipped: int = 0
