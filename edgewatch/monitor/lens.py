"""Whether the lens still lets through what it did in teaching: streaks against those of the reference bars.

The height of a streak goes with the light that the glass lets through, with the particle's temperature (to about the
twelfth power: Wien's law at 0.7 µm and 1800 K), and falls with its speed. Grades differ in it by a quarter, a wheel
worn from 30 to 20 m/s makes streaks a third brighter (rehearsal, all its steels). So half of the height of the dimmest
taught grade is neither: another steel on a clean lens stays above it. It is the point from where on figures suffer: at
half the height the burst-rate reads 5 % low, at a third 16 %, because the arms of bursts sink into the noise first.
Blur does the same: 6 % low at one and a half times the width.

A steel that is not taught may be dimmer still. It shall not hide behind a soiled lens: a window is used as evidence
until a whole second of contact has shown dim streaks, and what has been condemned stays condemned. The bar's own
figures at the end of its contact only keep it from being called conforming.
"""

from __future__ import annotations

import math
from collections import deque
from collections.abc import Iterable
from dataclasses import dataclass

from edgewatch.figures.values import Figures
from edgewatch.judge.bands import Band
from edgewatch.sight.optics import Optics

DIM_FACTOR = 2.0
WIDE_FACTOR = 1.5
"""So many times dimmer than the dimmest taught grade, or wider than the widest, is soiled."""
SCATTERS = 4.0
"""And further off than so many deviations from bar to bar, where these scatter by more than that."""
ENOUGH = 1.15
"""The cause ends when streaks are better than the limit by this factor: the gap keeps it from chattering."""
SPAN_S = 1.0
"""Contact time whose windows are looked at together (s)."""
LEAST_STREAKS = 50
"""Streaks that say something of the lens; fewer are as thin as the noise that they stand in."""


@dataclass(frozen=True, slots=True, kw_only=True)
class LensLimits:
    """Least height (DN) and greatest width (px) of streaks on a clean lens; NaN: not taught, so not judged."""

    least_peak_dn: float = math.nan
    most_width_px: float = math.nan


def lens_limits(bands: Iterable[Band], optics: Optics) -> LensLimits:
    """What is known from those bands that fit ``optics``: by the dimmest and the widest of them."""
    peaks, widths = [], []
    for band in bands:
        if band.misfit(optics):
            continue
        if band.streak_peak_dn:
            scatter = SCATTERS * (band.streak_peak_scatter or 0.0)
            peaks.append(band.streak_peak_dn / max(DIM_FACTOR, math.exp(scatter)))
        if band.streak_width_px:
            scatter = SCATTERS * (band.streak_width_scatter or 0.0)
            widths.append(band.streak_width_px * max(WIDE_FACTOR, math.exp(scatter)))
    return LensLimits(
        least_peak_dn=min(peaks, default=math.nan),
        most_width_px=max(widths, default=math.nan),
    )


class LensWatch:
    """Follows streaks over windows, and over bars too short for them. ``detail`` says what was found."""

    def __init__(self) -> None:
        self.soiled = False
        self.detail = ""
        self._recent: deque[Figures] = deque()

    def reset(self) -> None:
        """Forget everything: other bands say what streaks should be."""
        self.soiled, self.detail = False, ""
        self._recent.clear()

    def see_window(self, window: Figures, limits: LensLimits) -> bool:
        """Take a window; say whether the lens is soiled, over the last second of contact."""
        if window.streaks >= LEAST_STREAKS:
            self._recent.append(window)
        while self._recent and self._lasted() - _length(self._recent[0]) >= SPAN_S - 0.01:
            self._recent.popleft()
        if self._lasted() >= SPAN_S - 0.01:
            self._judge(tuple(self._recent), limits)
        return self.soiled

    def see_bar(self, bar: Figures, limits: LensLimits) -> bool:
        """Take a whole bar; say whether the lens is soiled."""
        if bar.streaks >= LEAST_STREAKS:
            self._judge((bar,), limits)
        return self.soiled

    def _lasted(self) -> float:
        return sum(_length(one) for one in self._recent)

    def _judge(self, parts: tuple[Figures, ...], limits: LensLimits) -> None:
        peak, width = (_typical(parts, name) for name in ("streak_peak_dn", "streak_width_px"))
        room = ENOUGH if self.soiled else 1.0
        dim = peak < limits.least_peak_dn * room
        wide = width > limits.most_width_px / room
        self.soiled = dim or wide
        said = []
        if dim:
            said.append(f"streaks {peak:.0f} DN high, at least {limits.least_peak_dn:.0f} are taught")
        if wide:
            said.append(f"streaks {width:.1f} px wide, at most {limits.most_width_px:.1f} are taught")
        self.detail = "; ".join(said)


def _length(window: Figures) -> float:
    return window.end_s - window.begin_s


def _typical(parts: tuple[Figures, ...], name: str) -> float:
    """Geometric mean by streaks; NaN, which no limit condemns, where it is not known."""
    known = [(math.log(getattr(one, name)), one.streaks) for one in parts if getattr(one, name) > 0.0]
    weight = sum(streaks for _, streaks in known)
    return math.exp(sum(value * streaks for value, streaks in known) / weight) if weight else math.nan
