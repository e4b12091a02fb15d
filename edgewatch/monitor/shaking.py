"""Whether the camera shakes: the streaks' common origin scatters from picture to picture by more than its own error.

The variance of the origin over a second of contact, less the mean of the pictures' own error variances, is that of the
shaking. It tells shaking of 1.5 and 3 px to 0.25 px; of a steady camera it never said more than 0.9 px (rehearsal, all
grades, 60 to 1000 frames/s, 500 to 20 000 sparks/s, haze, JPEG: ``tests.bench.bench_blind``).
"""

from __future__ import annotations

import math

import numpy as np

from edgewatch.sight.detections import Detections

SHAKING_PX, STEADY_PX = 2.5, 2.0
"""Standard deviation from which on the camera shakes, and at which it is steady again (px). The sight is made to work
at 1.5 px. At 3 px, edges of the machine that stand 10 DN out of the dark give five false streaks a picture, edges of
40 DN ten, with false bursts among them, and the burst-rate reads up to a tenth low."""
LEAST_PICTURES = 25
"""The deviation of so many is known to 14 %: shaking of 1.5 px is not taken for 2.5."""
SPAN_S = 1.0
"""Pictures of this long are looked at together (s), or ``LEAST_PICTURES`` where that is more."""
GAP_S = 0.25
"""After a pause this long the bar may lie elsewhere: what was before is not compared with it (s)."""
MOST_ERROR_PX = 2.0
"""A picture that knows its origin worse than this says nothing."""


class ShakeWatch:
    """Pictures in, whether the camera shakes out. ``shake_px``: what was last found (NaN: nothing yet)."""

    def __init__(self, fps: float) -> None:
        """``fps``: pictures a second."""
        self._seen = np.zeros((max(LEAST_PICTURES, round(SPAN_S * fps)), 2))  # ring of offset, error
        self._count = 0
        self._gap_s = max(GAP_S, 2.5 / fps)
        self._last_s = -math.inf
        self.shake_px = math.nan
        self.shaking = False

    def update(self, detections: Detections, t_s: float) -> bool:
        """Take one picture; without streaks enough it says nothing, and what was found stands. Some 20 µs."""
        offset, error = detections.origin_offset_px, detections.origin_error_px
        if not (math.isfinite(offset) and error <= MOST_ERROR_PX):
            return self.shaking
        if not 0.0 < t_s - self._last_s < self._gap_s:
            self._count = 0
        self._last_s = t_s
        self._seen[self._count % len(self._seen)] = offset, error
        self._count += 1
        if self._count >= LEAST_PICTURES:
            known = self._seen[: self._count]
            middle = known[:, 0] - known[:, 0].mean()
            excess = (middle @ middle) / (len(known) - 1) - (known[:, 1] @ known[:, 1]) / len(known)
            self.shake_px = math.sqrt(max(0.0, float(excess)))
            self.shaking = self.shake_px > (STEADY_PX if self.shaking else SHAKING_PX)
        return self.shaking
