"""State of the picture itself: light, noise, width of streaks, and what is wrong with it."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from edgewatch.sight import native
from edgewatch.sight.background import Background
from edgewatch.sight.detections import Light, PictureFlag
from edgewatch.sight.native import records
from edgewatch.sight.reading import read_levels
from edgewatch.sight.ridges import BLUR_PX, Ridges

FULL_DN = 254
"""From here on a pixel counts as full scale (DN): compression takes the last level away."""

SATURATED_SHARE = 0.02
"""More of the picture in patches at full scale than this hides streaks. Lines make no patches: the cores of bright
streaks are at full scale in many a good picture."""

NO_LIGHT_LEVEL_DN, NO_LIGHT_NOISE_DN = 1.5, 0.35
"""Below both, not even the offset and read noise of a camera arrive."""

DEFOCUSED_WIDTH_PX = 5.0
"""Full width at half maximum of streaks (px): twice that of a lens in focus on pixels that sample it well."""

STRAY_LEVEL_DN = 150.0
STRAY_UNEVEN_DN = 60.0
"""Background so high, or so uneven across the picture, that less than half of the range is left for streaks (DN)."""

CROWDED_SHARE = 0.12
"""Share of pixels on ridges: one in eight means streaks as near to each other as they are wide."""

SAMPLE_STEP_PX = 4
"""Full scale is looked for in one pixel of so many each way; a patch shows in two by two of them, so it is wider than a
streak in focus whatever the streak's direction."""

LEAST_LENGTH_PX = 8.0
MOST_LINES = 60
PROFILE_AT = np.array((0.2, 0.35, 0.5, 0.65, 0.8))
PROFILE_PX = 9.0
PROFILE_STEP_PX = 0.5
PROFILE_SIDES = np.arange(-PROFILE_PX, PROFILE_PX + 0.1, PROFILE_STEP_PX)
PROFILE_NOISE = 6.0
"""Width is read from profiles so far to either side, at these parts of at most so many lines, each of which is so long
and stands so many noise deviations above the ground."""

WIDTH_EVERY = 8
"""Once known, width is measured in one picture of so many: lenses do not change faster."""

KNOWN_LINES = 24
"""So many lines make the width known; later ones move it with the weight that they have beside so many. The first few
of a contact lie in the bundle at the wheel and look wide."""

DEFAULT_WIDTH_PX = 2.1

WIDTH_PER_SIGMA = 2.0 * math.sqrt(2.0 * math.log(2.0))
BETWEEN_PIXELS = 1.0 / 6.0
"""Mean variance that reading between pixels adds (px²): that of a triangle one pixel wide."""


class LightMeter:
    """Follows the width of streaks from picture to picture and judges each picture's light."""

    def __init__(self) -> None:
        self._variance = math.nan
        self._lines = 0
        self._ridge_share = 0.0
        self._count = -1

    @property
    def line_gain(self) -> float:
        """Height of a streak per level read along it in the blurred picture."""
        own = self._variance if math.isfinite(self._variance) else (DEFAULT_WIDTH_PX / WIDTH_PER_SIGMA) ** 2
        return math.sqrt((own + BLUR_PX**2 + BETWEEN_PIXELS) / own)

    def measure_width(self, begin: NDArray[np.float64], end: NDArray[np.float64], ridges: Ridges) -> None:
        """Width of streaks from ``begin`` to ``end`` (N, 2) px: where profiles across them fall to half."""
        self._ridge_share = ridges.index.size / max(1, ridges.blurred.size)
        self._count += 1
        if self._lines >= KNOWN_LINES and self._count % WIDTH_EVERY:
            return
        new, across = _find_width(begin, end, ridges)
        if not new:
            return
        total = (across / WIDTH_PER_SIGMA) ** 2
        own = max(total - BLUR_PX**2 - BETWEEN_PIXELS, 0.1)
        before = 0.0 if math.isnan(self._variance) else self._variance
        self._variance = (self._lines * before + new * own) / (self._lines + new)
        self._lines = min(self._lines + new, KNOWN_LINES)

    def read(self, picture: NDArray[np.uint8], background: Background, *, streaks: int, middle_snr: float) -> Light:
        """State of this picture. ``streaks``: how many; ``middle_snr``: median of their heights, NaN without."""
        share = _full_share(picture)
        width = WIDTH_PER_SIGMA * math.sqrt(self._variance) if math.isfinite(self._variance) else math.nan
        flags = PictureFlag.NONE
        if background.level_dn < NO_LIGHT_LEVEL_DN and background.raw_noise_dn < NO_LIGHT_NOISE_DN and not streaks:
            flags |= PictureFlag.NO_LIGHT
        if share > SATURATED_SHARE:
            flags |= PictureFlag.SATURATED
        if streaks and self._lines >= KNOWN_LINES and width > DEFOCUSED_WIDTH_PX:
            flags |= PictureFlag.DEFOCUSED
        if self._ridge_share > CROWDED_SHARE:
            flags |= PictureFlag.CROWDED
        if background.level_dn > STRAY_LEVEL_DN or background.uneven_dn > STRAY_UNEVEN_DN:
            flags |= PictureFlag.STRAY_LIGHT
        return Light(
            background_dn=background.level_dn,
            noise_dn=background.noise_dn,
            saturated_share=share,
            streak_width_px=width if streaks else math.nan,
            streak_peak_dn=middle_snr * background.noise_dn,
            flags=flags,
        )


def _full_share(picture: NDArray[np.uint8]) -> float:
    """Share of the picture in patches at full scale."""
    high, wide = (-(-side // SAMPLE_STEP_PX) - 1 for side in picture.shape)
    if native.LIBRARY:
        picture = np.ascontiguousarray(picture)
        patches: int = native.LIBRARY.edgewatch_full(native.place(picture), *picture.shape, SAMPLE_STEP_PX, FULL_DN)
    else:
        full = picture[::SAMPLE_STEP_PX, ::SAMPLE_STEP_PX] >= FULL_DN
        patches = int(np.count_nonzero(full[1:, 1:] & full[:-1, 1:] & full[1:, :-1] & full[:-1, :-1]))
    share: float = patches / max(1, high * wide)
    return share


def _find_width(begin: NDArray[np.float64], end: NDArray[np.float64], ridges: Ridges) -> tuple[int, float]:
    """Of how many lines that stand clear, and their width (px), NaN of none."""
    if native.LIBRARY:
        rules = records.WidthRules(
            least_length_px=LEAST_LENGTH_PX,
            profile_px=PROFILE_PX,
            step_px=PROFILE_STEP_PX,
            least_top=PROFILE_NOISE * ridges.threshold_noise,
            parts=native.place(PROFILE_AT),
            part_count=PROFILE_AT.size,
            samples=PROFILE_SIDES.size,
            most_lines=MOST_LINES,
        )
        across = native.double()
        places = [native.place(np.ascontiguousarray(ends)) for ends in (begin, end)]
        blurred, found = records.picture(ridges.blurred), native.reference(across)
        clear = native.LIBRARY.edgewatch_width(
            len(begin), *places, native.reference(blurred), native.reference(rules), found
        )
        return clear, across.value
    gap = end - begin
    length = np.hypot(gap[:, 0], gap[:, 1])
    chosen = np.flatnonzero(length > LEAST_LENGTH_PX)[:MOST_LINES]
    if not chosen.size:
        return 0, math.nan
    unit = gap[chosen] / length[chosen, None]
    at = begin[chosen, None] + PROFILE_AT[:, None] * gap[chosen, None]
    x = at[..., 0, None] - PROFILE_SIDES * unit[:, None, 1, None]
    y = at[..., 1, None] + PROFILE_SIDES * unit[:, None, 0, None]
    level = read_levels(ridges.blurred, x.ravel(), y.ravel()).reshape(*x.shape)
    profile = np.median(level, axis=1)
    top = profile.max(axis=1)
    clear = top > PROFILE_NOISE * ridges.threshold_noise
    if not clear.any():
        return 0, math.nan
    wide = np.sort((profile[clear] >= 0.5 * top[clear, None]).sum(axis=1)) * PROFILE_STEP_PX
    # the narrower half but for the narrowest: neighbours widen many lines of a full stream, noise narrows few
    return wide.size, float(wide[wide.size // 8 : max(1, (wide.size + 1) // 2)].mean())
