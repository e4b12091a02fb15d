"""The figures of a stretch of time: a window, a bar, a whole clip."""

from __future__ import annotations

import math
from dataclasses import dataclass


@dataclass(frozen=True, slots=True, kw_only=True)
class Figures:
    """Figures of one stretch of time, with uncertainty. Times in seconds of the source's own clock.

    ``bursts`` is the whole number counted; ``exposure_m`` is the track (m) during which a burst would have been
    counted (equal to ``track_m`` times the sight's gain for bursts that show although they went off while the shutter
    was closed), so ``burst_rate_per_m = bursts / exposure_m`` (NaN without track) with exact central 95 % Poisson
    limits ``burst_rate_low_per_m`` and ``burst_rate_high_per_m`` (Garwood 1936).
    ``reach_mm``: distance from the contact point along the axis within which 90 % of the track lies (NaN without
    track), ``reach_low_mm`` / ``reach_high_mm`` its 95 % limits; ``cut_share``: share of the track that leaves the
    picture, ``reach_truncated``: more than 2 % does. ``spark_speed_m_s``: speed near the wheel (NaN if unknown).
    ``bursts_listed``: all bursts listed, the less sure ones too, which would lift the rate where there are few.
    ``streak_peak_dn``, ``streak_width_px``: typical height above ground (DN) and full width at half maximum (px) of
    streaks, geometric means over pictures by their number of streaks (NaN without).
    ``frames_seen`` judged and ``frames_skipped`` not seen although the camera delivered them.
    """

    begin_s: float
    end_s: float
    frames_seen: int
    frames_skipped: int
    streaks: int
    bursts: int
    track_m: float
    exposure_m: float
    burst_rate_per_m: float
    burst_rate_low_per_m: float
    burst_rate_high_per_m: float
    reach_mm: float
    reach_low_mm: float
    reach_high_mm: float
    cut_share: float
    reach_truncated: bool
    streaks_per_frame: float
    spark_speed_m_s: float
    bursts_listed: int = 0
    streak_peak_dn: float = math.nan
    streak_width_px: float = math.nan
