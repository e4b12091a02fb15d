"""What was seen in one picture: streaks, bursts, and the state of the picture itself.

Same fields and dtypes with 0 or 1000 streaks: a dark picture gives empty arrays, never ``None``.
"""

from __future__ import annotations

import enum
import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray


class PictureFlag(enum.IntFlag):
    """What is wrong with a picture; the station turns lasting flags into named causes."""

    NONE = 0
    NO_LIGHT = 1  # dark in a way that no working camera is: no read noise, no offset, lens cap
    SATURATED = 2  # large parts at full scale
    DEFOCUSED = 4  # streaks much wider than the optics allow
    CROWDED = 8  # so many streaks overlap that counts are not trusted
    STRAY_LIGHT = 16  # the background is high or uneven and leaves no contrast


class StreakFlag(enum.IntFlag):
    """What is doubtful about one streak."""

    NONE = 0
    CUT_BEGIN = 1  # the end nearer the contact point touches the picture's edge
    CUT_END = 2  # the end away from the contact point touches the picture's edge
    CROWDED = 4  # runs within others over much of its length


class BurstFlag(enum.IntFlag):
    """What is doubtful about one burst."""

    NONE = 0
    LATE = 1  # went off while the shutter was closed: arms without the streak that led to them
    FORK = 2  # two or three forward prongs rather than a star
    EDGE = 4  # so near the picture's edge that arms may be missing


@dataclass(frozen=True, slots=True, kw_only=True)
class Light:
    """State of one picture. ``background_dn`` and ``noise_dn``: typical level and noise (DN, 0..255);
    ``saturated_share``: share of the picture in patches at full scale; ``streak_width_px``: median full width at half
    maximum of streaks (px), NaN without streaks; ``streak_peak_dn``: median height of streaks above background (DN),
    NaN without.
    """

    background_dn: float
    noise_dn: float
    saturated_share: float
    streak_width_px: float
    streak_peak_dn: float
    flags: PictureFlag


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Detections:
    """Streaks and bursts of one picture.

    ``streaks``: float32 (N, 4), x0 y0 x1 y1 in px; the first end is the one nearer the contact point along the axis.
    ``streak_snr``: float32 (N,), height above background in noise deviations. ``streak_flags``: uint8 (N,).
    ``bursts``: float32 (M, 2), x y in px, each listed only in the picture where it first shows.
    ``burst_arms``: int16 (M,), arms seen. ``burst_flags``: uint8 (M,).
    ``light``: state of the picture.

    For the burst-rate: ``rate_bursts``, bursts of this picture that count for the rate (the surer ones), and
    ``rate_exposure_px``, the track (px) during which such a burst would have been counted. Sums over pictures give the
    rate without bias from the time between exposures; left out, they are all bursts and all track.

    ``origin_offset_px``: how far from the contact point, across the axis, the streaks come from, with its standard
    error ``origin_error_px``; NaN with too few streaks. It scatters from picture to picture when the camera shakes.
    """

    streaks: NDArray[np.float32]
    streak_snr: NDArray[np.float32]
    streak_flags: NDArray[np.uint8]
    bursts: NDArray[np.float32]
    burst_arms: NDArray[np.int16]
    burst_flags: NDArray[np.uint8]
    light: Light
    rate_bursts: int = -1
    rate_exposure_px: float = math.nan
    origin_offset_px: float = math.nan
    origin_error_px: float = math.nan

    def __post_init__(self) -> None:
        """Fill in what was left out."""
        if self.rate_bursts < 0:
            object.__setattr__(self, "rate_bursts", int(self.bursts.shape[0]))
        if math.isnan(self.rate_exposure_px):
            runs = self.streaks[:, 2:] - self.streaks[:, :2]
            object.__setattr__(self, "rate_exposure_px", float(np.hypot(runs[:, 0], runs[:, 1]).sum(dtype=np.float64)))
