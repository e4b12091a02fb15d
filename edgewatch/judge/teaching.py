"""Teaching: figures of reference bars -> a band, a tolerance interval for the next bar's true values."""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from edgewatch.errors import SettingsError
from edgewatch.figures.tally import TRUNCATED_SHARE
from edgewatch.figures.values import Figures
from edgewatch.figures.wear import HIGH_M_S, LOW_M_S, reach_at_speed
from edgewatch.judge.bands import Band, ReferenceBar
from edgewatch.judge.likeness import LEAST_SCATTER
from edgewatch.judge.tolerance import esd_outliers, half_width, true_scatter
from edgewatch.sight.optics import Optics

CONTENT = 0.99
"""Share of all bars of the grade that the band is meant to hold."""
CONFIDENCE = 0.95
"""Confidence that it holds them."""
LEAST_BARS = 5
"""Fewer reference bars are refused: the tolerance factor is then above 6 scatters."""
ENOUGH_BARS = 20
"""With fewer bars the band is wider than need be, and that is said."""
OUTLIER_LEVEL = 0.05
"""Probability of naming any bar among good ones: to look at a named bar costs little, a wrong one costs the band."""
TYPICAL_LIFE_S = 0.1
"""Most particles glow for less than this (s): neighbouring windows share them for as long."""
CUT_BARS_SHARE = 0.1
"""With more of the bars cut off than this, the band holds no reach."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Outlier:
    """A reference bar that does not fit the others. ``figure``: ``burst_rate`` or ``reach``."""

    number: int
    figure: str
    value: float
    center: float


def settled(windows: Sequence[Figures]) -> Sequence[Figures]:
    """Windows without the first and the last, in which the stream fills and empties; all if that leaves none."""
    return windows[1:-1] if len(windows) > 2 else windows


def reference_bar(number: int, clip: str, bar: Figures, windows: Sequence[Figures]) -> ReferenceBar:
    """Sum up one contact as a reference bar. Raises ``ValueError`` when its figures are not finite."""
    if not (math.isfinite(bar.track_m) and bar.exposure_m > 0.0 and bar.bursts >= 0):
        raise ValueError(f"bar {number} of {clip}: no track")
    rate_misfit, rate_freedom = _rate_misfit(windows)
    reach, reach_track, reach_misfit, reach_freedom = _reach_of(windows)
    steady = settled(windows)
    if bar.cut_share > TRUNCATED_SHARE:
        reach = math.nan
    return ReferenceBar(
        number=number,
        clip=clip,
        begin_s=bar.begin_s,
        end_s=bar.end_s,
        frames=bar.frames_seen,
        streaks=bar.streaks,
        bursts=bar.bursts,
        track_m=bar.track_m,
        exposure_m=bar.exposure_m,
        reach_mm=reach,
        reach_track_m=reach_track,
        cut_share=bar.cut_share,
        spark_speed_m_s=bar.spark_speed_m_s,
        rate_misfit=rate_misfit,
        rate_freedom=rate_freedom,
        reach_misfit=reach_misfit,
        reach_freedom=reach_freedom,
        window_s=sum(one.end_s - one.begin_s for one in steady) / len(steady) if steady else 0.25,
        streak_peak_dn=bar.streak_peak_dn if math.isfinite(bar.streak_peak_dn) else None,
        streak_width_px=bar.streak_width_px if math.isfinite(bar.streak_width_px) else None,
    )


def _rate_misfit(windows: Sequence[Figures]) -> tuple[float, int]:
    """Pearson's sum and its degrees of freedom over the windows of one bar."""
    used = [one for one in windows if one.exposure_m > 0.0]
    bursts = sum(one.bursts for one in used)
    exposure = sum(one.exposure_m for one in used)
    if len(used) < 2 or not bursts:
        return 0.0, 0
    rate = bursts / exposure
    return sum((one.bursts - rate * one.exposure_m) ** 2 / (rate * one.exposure_m) for one in used), len(used) - 1


def _reach_of(windows: Sequence[Figures]) -> tuple[float, float, float, int]:
    """Reach by track over settled windows, their track, the weighted misfit and its degrees of freedom."""
    used = [one for one in settled(windows) if math.isfinite(one.reach_mm) and one.track_m > 0.0]
    track = sum(one.track_m for one in used)
    if not used:
        return math.nan, 0.0, 0.0, 0
    reach = sum(one.track_m * one.reach_mm for one in used) / track
    return reach, track, sum(one.track_m * (one.reach_mm - reach) ** 2 for one in used), len(used) - 1


def _long_run(window_s: float) -> float:
    """Factor from the variance of single windows to that of sums of many: neighbours share particles.

    A particle of life L that flies across the border of two windows of length W (a share L / W of them) leaves parts
    u and 1 - u of its track on either side, E[u (1 - u)] = 1/6: correlation (L / 6 W) / (1 - L / 3 W). A sum of many
    windows has 1 + 2 times it.
    """
    share = min(1.0, TYPICAL_LIFE_S / max(window_s, 1e-6))
    return 1.0 + 2.0 * (share / 6.0) / (1.0 - share / 3.0)


def teach(
    grade: str,
    bars: Sequence[ReferenceBar],
    *,
    optics: Optics,
    left_out: Iterable[int] = (),
    content: float = CONTENT,
    confidence: float = CONFIDENCE,
    wheel_speed_m_s: float = math.nan,
    taught: str = "",
) -> Band:
    """Make the band of ``grade`` from its reference bars; those numbered in ``left_out`` are kept but not used.

    The logarithms of hazard and of reach are taken as normal from bar to bar. Their sample variance holds the scatter
    of the true values and the sampling noise (known from counts, dispersion and window noise); the band is the
    tolerance interval of the true values alone (``tolerance.half_width``). Raises ``SettingsError`` with fewer than
    five bars in use, on numbers to leave out that are not there, and on figures that cannot be used.
    """
    left_out = set(left_out)
    numbers = [bar.number for bar in bars]
    unknown = sorted(left_out - set(numbers))
    if unknown:
        raise SettingsError(f"leave-out {unknown[0]}: no such bar; bars are {_spans(numbers)}")
    bars = tuple(dataclasses.replace(bar, left_out=bar.left_out or bar.number in left_out) for bar in bars)
    used = [bar for bar in bars if not bar.left_out]
    if len(used) < LEAST_BARS:
        raise SettingsError(f"{grade}: {len(used)} reference bars: at least {LEAST_BARS} are needed")
    wrong = [bar.number for bar in used if not (math.isfinite(bar.exposure_m) and bar.exposure_m > 0.0)]
    if wrong:
        raise SettingsError(f"{grade}: bar {wrong[0]} has no track: leave it out")
    dispersion = pooled_dispersion(used)
    rate = _rate_interval(used, content, confidence)
    reach = _reach_interval(used, content, confidence)
    peak, peak_scatter = _typical([bar.streak_peak_dn for bar in used])
    width, width_scatter = _typical([bar.streak_width_px for bar in used])
    return Band(
        grade=grade,
        burst_rate_low_per_m=rate.low,
        burst_rate_high_per_m=rate.high,
        rate_center_per_m=rate.center,
        rate_scatter=rate.scatter,
        rate_dispersion=dispersion,
        reach_low_mm=reach.low if reach else None,
        reach_high_mm=reach.high if reach else None,
        reach_center_mm=reach.center if reach else None,
        reach_scatter=reach.scatter if reach else None,
        reach_noise_mm2_m=_long_run_noise(used) if reach else None,
        streak_peak_dn=peak,
        streak_peak_scatter=peak_scatter,
        streak_width_px=width,
        streak_width_scatter=width_scatter,
        content=content,
        confidence=confidence,
        bars_used=len(used),
        bursts=sum(bar.bursts for bar in used),
        track_m=sum(bar.track_m for bar in used),
        mm_per_px=optics.mm_per_px,
        contact_px=optics.contact_px,
        direction_deg=optics.direction_deg,
        width_px=optics.width_px,
        height_px=optics.height_px,
        exposure_ms=optics.exposure_ms,
        fps=optics.fps,
        wheel_speed_m_s=wheel_speed_m_s,
        spark_speed_m_s=_typical_speed(used),
        streaks_per_frame=sum(bar.streaks for bar in used) / max(1, sum(bar.frames for bar in used)),
        taught=taught,
        bars=bars,
    )


@dataclass(frozen=True, slots=True)
class _Interval:
    low: float
    high: float
    center: float
    scatter: float


def pooled_dispersion(bars: Sequence[ReferenceBar]) -> float:
    """Variance over mean of burst counts within bars, at least 1 (Pearson's estimate, pooled)."""
    return max(1.0, _measured_dispersion(bars))


def _measured_dispersion(bars: Sequence[ReferenceBar]) -> float:
    """The estimate itself, which chance takes below 1: as noise to be taken out no more than was measured."""
    freedom = sum(bar.rate_freedom for bar in bars)
    return sum(bar.rate_misfit for bar in bars) / freedom if freedom else 1.0


def pooled_reach_noise(bars: Sequence[ReferenceBar]) -> float:
    """Variance of a window's reach times its track (mm^2 m), pooled within bars; NaN if no bar has two windows."""
    bars = [bar for bar in bars if math.isfinite(bar.reach_mm)]
    freedom = sum(bar.reach_freedom for bar in bars)
    return sum(bar.reach_misfit for bar in bars) / freedom if freedom else math.nan


def _long_run_noise(bars: Sequence[ReferenceBar]) -> float:
    """The same for sums of many windows, which the trial adds up."""
    return pooled_reach_noise(bars) * _long_run(sum(bar.window_s for bar in bars) / len(bars))


def log_rates(bars: Sequence[ReferenceBar], dispersion: float) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Logarithm of each bar's hazard and the sampling variance of it."""
    bursts = np.array([bar.bursts for bar in bars], dtype=np.float64)
    exposure = np.array([bar.exposure_m for bar in bars])
    pooled = max(float(bursts.sum()), 0.5) / float(exposure.sum())
    # one more than expected: with few bursts the logarithm scatters unlike a normal, and too much must not be removed
    return np.log((bursts + 0.5) / exposure), dispersion / (pooled * exposure + 1.0)


def _typical_speed(bars: Sequence[ReferenceBar]) -> float:
    """Median spark speed near the wheel (m/s), NaN if not known: the speed at which the band's reach holds."""
    speeds = [bar.spark_speed_m_s for bar in bars if LOW_M_S <= bar.spark_speed_m_s <= HIGH_M_S]
    return float(np.median(speeds)) if speeds else math.nan


def _typical(values: Sequence[float | None]) -> tuple[float | None, float | None]:
    """Geometric mean and standard deviation of the logarithm of the values that are known; ``None`` with too few."""
    known = [math.log(value) for value in values if value is not None and 0.0 < value < math.inf]
    if len(known) < LEAST_BARS:
        return None, None
    return math.exp(float(np.mean(known))), float(np.std(known, ddof=1))


def log_reaches(
    bars: Sequence[ReferenceBar], speed_m_s: float = math.nan
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Logarithm of each bar's reach at ``speed_m_s`` (NaN where cut) and the sampling variance of it."""
    reach = np.array(
        [
            reach_at_speed(bar.reach_mm, bar.spark_speed_m_s, speed_m_s)
            if math.isfinite(speed_m_s) and LOW_M_S <= bar.spark_speed_m_s <= HIGH_M_S
            else bar.reach_mm
            for bar in bars
        ]
    )
    track = np.array([bar.reach_track_m for bar in bars])
    noise = pooled_reach_noise(bars)
    variance = (noise if math.isfinite(noise) else 0.0) / np.maximum(track, 1e-9) / reach**2
    return np.log(reach), variance


def _interval(values: NDArray[np.float64], noise: NDArray[np.float64], content: float, confidence: float) -> _Interval:
    center = float(values.mean())
    variance = float(values.var(ddof=1))
    mean_noise = float(noise.mean())
    half = half_width(
        variance=variance,
        noise=mean_noise,
        count=len(values),
        content=content,
        confidence=confidence,
        least_scatter=LEAST_SCATTER,
    )
    return _Interval(
        math.exp(center - half),
        math.exp(center + half),
        math.exp(center),
        true_scatter(variance=variance, noise=mean_noise, count=len(values)),
    )


def _rate_interval(used: Sequence[ReferenceBar], content: float, confidence: float) -> _Interval:
    values, noise = log_rates(used, _measured_dispersion(used))
    found = _interval(values, noise, content, confidence)
    return found if any(bar.bursts for bar in used) else dataclasses.replace(found, low=0.0)


def _reach_interval(used: Sequence[ReferenceBar], content: float, confidence: float) -> _Interval | None:
    kept = [bar for bar in used if math.isfinite(bar.reach_mm) and bar.reach_mm > 0.0]
    if len(kept) < LEAST_BARS or len(used) - len(kept) > CUT_BARS_SHARE * len(used):
        return None
    speed = _typical_speed(used)
    values, noise = log_reaches(kept, speed)
    return _interval(values, noise, content, confidence)


def find_outliers(bars: Sequence[ReferenceBar]) -> list[Outlier]:
    """Bars in use that do not fit the others, by either figure; the farthest first."""
    used = [bar for bar in bars if not bar.left_out]
    if len(used) < LEAST_BARS:
        return []
    most = max(1, len(used) // 4)
    found = []
    rates, _ = log_rates(used, 1.0)
    reaches = np.log([bar.reach_mm if bar.reach_mm > 0.0 else math.nan for bar in used])
    for name, values in (("burst_rate", rates), ("reach", reaches)):
        if int(np.isfinite(values).sum()) < LEAST_BARS:
            continue
        places = esd_outliers(values, most=most, level=OUTLIER_LEVEL / 2.0)
        rest = float(np.exp(np.nanmean(np.delete(values, places))))
        found += [
            Outlier(number=used[at].number, figure=name, value=math.exp(values[at]), center=rest) for at in places
        ]
    return found


def remarks(band: Band) -> list[str]:
    """What should be said about a band when it is made: few bars, outliers, no reach, overdispersion."""
    said = []
    if band.bars_used < ENOUGH_BARS:
        said.append(f"{band.bars_used} reference bars: with {ENOUGH_BARS} or more the band would be narrower")
    for one in find_outliers(band.bars):
        unit = "1/m" if one.figure == "burst_rate" else "mm"
        said.append(
            f"bar {one.number} stands out: {one.figure} {one.value:.3g} {unit} against {one.center:.3g} {unit}; "
            f"if it is a wrong bar, leave it out with --leave-out {one.number}"
        )
    if not band.has_reach:
        said.append("the streams are cut off by the picture's edge or reach was not measured: the band holds no reach")
    if band.burst_rate_low_per_m == 0.0:
        said.append("no burst was seen: the band has no lower limit")
    return said


def _spans(numbers: Sequence[int]) -> str:
    return f"{min(numbers)} to {max(numbers)}" if numbers else "none"
