"""Steps of brightness along pieces of ridge: where streaks begin and end.

Along each piece the brightness is read beyond both its ends, and its steps are found by differences of boxes (Rosenfeld
& Thurston, IEEE Trans. Computers C-20, 1971). A step up is where a streak begins, a step down where one ends; where
streaks overlap, brightness adds up and the steps remain.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from edgewatch.sight.native import records
from edgewatch.sight.reading import read_levels
from edgewatch.sight.segments import Segments

BOX_PX = 4
"""Length of the two boxes whose difference is a step (px): twice the width of a streak's own blur."""

BEYOND_PX = 5
"""Steps are looked for this far beyond a piece's ends (px): at the picture's edge ridges end three pixels short."""

STEP_NOISE = 4.0
"""A step is this many deviations of its own noise high."""

STEP_NOISE_GAIN = 0.92
"""Noise of a difference of boxes per noise of a pixel of the blurred picture, whose pixels are correlated."""

STEP_SHARE = 0.16
"""And this share of the brightness on its high side: less is a streak's own unevenness."""

FULL_SHARE = 0.7
"""A step of at least this share of its high side leads from darkness: a streak's own end, with nothing beyond."""

STREAK_POINTS = 4
"""A piece with fewer ridge points than this has no direction good enough to look for steps along it."""


RULES = records.StepRules(
    noise=STEP_NOISE * STEP_NOISE_GAIN,
    share=STEP_SHARE,
    least_points=STREAK_POINTS,
    beyond_px=BEYOND_PX,
    box_px=BOX_PX,
)
"""All of this for the compiled form."""


@dataclass(frozen=True, slots=True, eq=False)
class Steps:
    """Steps along pieces, arrays of length N: ``at`` (N, 2) px; ``inward`` (N, 2) unit vector into the streak;
    ``height`` DN; ``size`` px, length of the piece it lies on; ``begins``: up along the stream; ``share``: height as a
    share of the brightness on its high side.
    """

    at: NDArray[np.float64]
    inward: NDArray[np.float64]
    height: NDArray[np.float64]
    size: NDArray[np.float64]
    begins: NDArray[np.bool_]
    share: NDArray[np.float64]

    @property
    def full(self) -> NDArray[np.bool_]:
        """From darkness."""
        return np.asarray(self.share > FULL_SHARE)


def find_steps(pieces: Segments, blurred: NDArray[np.float32], noise: float, axis: tuple[float, float]) -> Steps:
    """Steps along every piece. All pieces are laid end to end into one row, so that sums run over them together."""
    long = np.flatnonzero(pieces.points >= STREAK_POINTS)
    along_axis = pieces.axis[long] @ np.asarray(axis)
    heading = np.where(along_axis < 0.0, -1.0, 1.0)[:, None] * pieces.axis[long]
    start = np.where(along_axis[:, None] < 0.0, pieces.end[long], pieces.begin[long])
    length = pieces.length[long]
    margin = BEYOND_PX + 2 * BOX_PX
    size = np.ceil(length).astype(np.int64) + 1 + 2 * margin
    first = np.cumsum(size) - size
    owner = np.repeat(np.arange(long.size), size)
    place = np.arange(owner.size) - np.repeat(first + float(margin), size)
    x = np.repeat(start[:, 0], size) + np.repeat(heading[:, 0], size) * place
    y = np.repeat(start[:, 1], size) + np.repeat(heading[:, 1], size) * place
    total = np.concatenate([np.zeros(1), np.cumsum(read_levels(blurred, x, y), dtype=np.float64)])
    ahead, behind = np.zeros(owner.size), np.zeros(owner.size)
    ahead[: -BOX_PX - 1] = (total[BOX_PX + 1 : -1] - total[1 : -BOX_PX - 1]) / BOX_PX
    behind[BOX_PX:] = (total[BOX_PX:-1] - total[: -BOX_PX - 1]) / BOX_PX
    rise = ahead - behind
    height, high = np.abs(rise), np.maximum(ahead, behind)
    inside = (place >= -BEYOND_PX) & (place <= np.repeat(length + BEYOND_PX, size))
    found = np.flatnonzero(inside & (height > np.maximum(STEP_NOISE * STEP_NOISE_GAIN * noise, STEP_SHARE * high)))
    peak = np.ones(found.size, np.bool_)
    for aside in (-3, -2, -1, 1, 2, 3):  # margins keep the neighbours within the same piece
        peak &= height[found] >= rise[found + aside] * np.sign(rise[found])
    found = found[peak]
    begins = rise[found] > 0.0
    # A parabola through the rise and its neighbours puts the step between pixels.
    before, here, after = height[found - 1], height[found], height[found + 1]
    shift = np.clip(0.5 * (before - after) / np.minimum(before - 2.0 * here + after, -1e-9), -0.5, 0.5)
    own = heading[owner[found]]
    return Steps(
        at=np.stack([x[found] + shift * own[:, 0], y[found] + shift * own[:, 1]], axis=1),
        inward=heading[owner[found]] * np.where(begins, 1.0, -1.0)[:, None],
        height=height[found],
        size=length[owner[found]],
        begins=begins,
        share=height[found] / high[found],
    )
