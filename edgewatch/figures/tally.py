"""Detections over time -> figures of that time.

The track along the stream axis is kept as a histogram; a streak adds its length evenly over the distance it covers.
Time is kept in blocks, so that the uncertainty of reach can respect that neighbouring frames see the same particles.
Everything that is kept is a sum, so tallies of windows add up to the tally of the bar.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import stdtrit

from edgewatch.figures.limits import poisson_limits
from edgewatch.figures.values import Figures
from edgewatch.sight.detections import Detections, StreakFlag
from edgewatch.sight.optics import Optics

REACH_SHARE = 0.90
"""Share of the track that lies within reach."""
TRUNCATED_SHARE = 0.02
"""Reach is marked when more than this share of the track leaves the picture."""
AXIS_BINS = 512
"""Bins along the axis: about a pixel each in the pictures this is made for; positions between are interpolated."""
BLOCK_S = 0.025
"""One block of time (s): short against the shortest window, a few frames at usual rates."""
MOST_BLOCKS = 512
"""With more blocks, neighbours are joined: memory and cost of a long contact stay bounded."""
MOST_WAITING = 32
"""Frames are worked up so many at a time: numpy's calls cost as much as the work on one frame's streaks."""
LIFE_S = 0.15
"""Hardly a particle glows longer than this (s): figures further apart are independent."""
SPEED_BINS = 24
"""Bins along the axis for the speed profile."""
LENGTH_STEP = 0.03
"""Width of a bin of the logarithm of streak length; medians are interpolated within it."""
LENGTH_LOW_MM = 0.5
LENGTH_BINS = 256
"""Streak lengths from 0.5 mm to 1 m."""
LEAST_SPEED_STREAKS = 12
"""Streaks that a bin of the speed profile needs for its median."""


_CUT_END = np.uint8(StreakFlag.CUT_END)
_IN_PART = np.uint8(StreakFlag.CUT_BEGIN | StreakFlag.CUT_END | StreakFlag.CROWDED)
"""As numbers: an ``IntFlag`` costs numpy more than the comparison."""


@dataclass(slots=True)
class _Sums:
    """Everything additive, over one or more blocks."""

    frames_seen: int = 0
    frames_skipped: int = 0
    streaks: int = 0
    bursts: int = 0
    bursts_listed: int = 0
    track_mm: float = 0.0
    exposure_mm: float = 0.0
    cut_streaks: int = 0
    log_peak: float = 0.0  # of the height in DN, by streaks
    peak_streaks: int = 0
    log_width: float = 0.0  # of the width in px, by streaks
    width_streaks: int = 0
    refused: int = 0


class Tally:
    """Running sums of one stretch of time.

    ``add`` costs a few microseconds a frame; frames are worked up ``MOST_WAITING`` at a time. Raises ``ValueError``
    when tallies of different optics are added.
    """

    def __init__(self, optics: Optics) -> None:
        self.optics = optics
        corners = np.array(
            [[x, y] for x in (-0.5, optics.width_px - 0.5) for y in (-0.5, optics.height_px - 0.5)], dtype=np.float64
        )
        along = optics.along_mm(corners)
        self._low_mm = float(along.min()) - 2.0 * optics.mm_per_px
        self._step_mm = (float(along.max()) + 2.0 * optics.mm_per_px - self._low_mm) / AXIS_BINS
        self.reset()

    def reset(self) -> None:
        """Forget everything."""
        self._sums = _Sums()
        self._begin_s = math.nan
        self._end_s = math.nan
        self._block_s = BLOCK_S
        self._blocks: dict[int, NDArray[np.float64]] = {}
        self._lengths: NDArray[np.int64] = np.zeros((SPEED_BINS, LENGTH_BINS), dtype=np.int64)
        self._waiting: list[tuple[int, Detections]] = []
        """Frames that are not yet worked up, each with its block."""

    @property
    def refused(self) -> int:
        """Streaks that were not finite and were left out."""
        self._work_up()
        return self._sums.refused

    @property
    def frames_seen(self) -> int:
        """Frames added."""
        return self._sums.frames_seen

    @property
    def streaks(self) -> int:
        """Streaks added."""
        return self._sums.streaks

    def add(self, detections: Detections, *, t_s: float, skipped: int = 0) -> None:
        """Add one frame taken at ``t_s`` (s); ``skipped`` frames before it were not looked at."""
        if not math.isfinite(t_s) or skipped < 0:
            raise ValueError(f"t_s = {t_s!r}, skipped = {skipped!r}: a finite time and a count are needed")
        if len(self._waiting) >= MOST_WAITING:
            self._work_up()
        self._waiting.append((math.floor(t_s / self._block_s + 1e-9), detections))
        sums = self._sums
        sums.frames_seen += 1
        sums.frames_skipped += skipped
        sums.streaks += len(detections.streaks)
        sums.bursts += detections.rate_bursts
        sums.bursts_listed += len(detections.bursts)
        if math.isfinite(detections.rate_exposure_px) and detections.rate_exposure_px > 0.0:
            sums.exposure_mm += detections.rate_exposure_px * self.optics.mm_per_px
        elif len(detections.streaks):  # refused: the finite streaks alone
            runs = detections.streaks[np.isfinite(detections.streaks).all(axis=1)]
            length = np.hypot(runs[:, 2] - runs[:, 0], runs[:, 3] - runs[:, 1])
            sums.exposure_mm += float(length.sum()) * self.optics.mm_per_px
        self._note_light(detections)
        self._begin_s = t_s if math.isnan(self._begin_s) else min(self._begin_s, t_s)
        end = t_s + self.optics.period_s
        self._end_s = end if math.isnan(self._end_s) else max(self._end_s, end)

    def _note_light(self, detections: Detections) -> None:
        sums, count = self._sums, len(detections.streaks)
        peak, width = detections.light.streak_peak_dn, detections.light.streak_width_px
        if 0.0 < peak < math.inf:
            sums.log_peak += count * math.log(peak)
            sums.peak_streaks += count
        if 0.0 < width < math.inf:
            sums.log_width += count * math.log(width)
            sums.width_streaks += count

    def merge(self, other: Tally) -> None:
        """Add another stretch of time, taken with the same optics."""
        if other.optics != self.optics:
            raise ValueError("tallies taken with different optics do not add up")
        self._work_up()
        other._work_up()
        for name in _Sums.__slots__:
            setattr(self._sums, name, getattr(self._sums, name) + getattr(other._sums, name))
        while self._block_s < other._block_s:
            self._join_blocks()
        times = round(self._block_s / other._block_s)
        for block, profile in other._blocks.items():
            kept = self._blocks.get(block // times)
            self._blocks[block // times] = profile.copy() if kept is None else kept + profile
        while len(self._blocks) > MOST_BLOCKS:
            self._join_blocks()
        self._lengths += other._lengths
        self._begin_s = float(np.fmin(self._begin_s, other._begin_s))
        self._end_s = float(np.fmax(self._end_s, other._end_s))

    def _join_blocks(self) -> None:
        """Make blocks twice as long."""
        joined: dict[int, NDArray[np.float64]] = {}
        for block, profile in self._blocks.items():
            kept = joined.get(block // 2)
            joined[block // 2] = profile if kept is None else kept + profile
        self._blocks = joined
        self._block_s *= 2.0

    def _work_up(self) -> None:
        """Turn the waiting frames into sums and the profile of their block."""
        if not self._waiting:
            return
        blocks = [block for block, _ in self._waiting]
        waiting = [detections for _, detections in self._waiting]
        self._waiting = []
        while len(self._blocks.keys() | blocks) > MOST_BLOCKS:
            self._join_blocks()
            blocks = [block // 2 for block in blocks]
        for block in blocks:
            if block not in self._blocks:
                self._blocks[block] = np.zeros(AXIS_BINS)
        streaks = np.concatenate([one.streaks for one in waiting]).astype(np.float64)
        flags = np.concatenate([one.streak_flags for one in waiting])
        own = sorted(set(blocks))  # each streak's is told by its place among these
        row = np.repeat([own.index(block) for block in blocks], [len(one.streaks) for one in waiting])
        good = np.isfinite(streaks).all(axis=1)
        if not good.all():
            bad = int(good.size - good.sum())
            self._sums.refused += bad
            self._sums.streaks -= bad
            streaks, flags, row = streaks[good], flags[good], row[good]
        if not len(streaks):
            return
        ends = self.optics.along_mm(streaks.reshape(-1, 2, 2))
        length = np.hypot(streaks[:, 2] - streaks[:, 0], streaks[:, 3] - streaks[:, 1]) * self.optics.mm_per_px
        near, far = np.minimum(ends[:, 0], ends[:, 1]), np.maximum(ends[:, 0], ends[:, 1])
        for block, profile in zip(own, self._spread(near, far, length, row, len(own)), strict=True):
            self._blocks[block] += profile
        self._sums.track_mm += float(length.sum())
        self._sums.cut_streaks += int(np.count_nonzero(flags & _CUT_END))
        self._note_lengths(near, far, length, flags)

    def _spread(
        self,
        near: NDArray[np.float64],
        far: NDArray[np.float64],
        length: NDArray[np.float64],
        row: NDArray[np.integer],
        rows: int,
    ) -> NDArray[np.float64]:
        """Track per row and bin (mm) with each length spread evenly from ``near`` to ``far``.

        The running total of one streak is a ramp, the difference of two half-lines; a half-line that starts within
        a bin is two entries of the second difference. So four ``bincount`` do all streaks, exactly.
        """
        near = np.clip((near - self._low_mm) / self._step_mm, 0.0, AXIS_BINS - 2.0)
        far = np.clip((far - self._low_mm) / self._step_mm, 0.0, AXIS_BINS - 1.0)
        far = np.maximum(far, near + 1e-3)  # a streak across the axis: all of it at one place
        slope = length / (far - near)
        size, first = AXIS_BINS + 3, row * (AXIS_BINS + 3) + 1
        second = np.zeros(rows * size)
        for start, rise in ((near, slope), (far, -slope)):
            at = start.astype(np.intp)
            later = rise * (start - at)
            at += first
            second += np.bincount(at, rise - later, second.size)
            second += np.bincount(at + 1, later, second.size)
        # first running sum: track within each bin
        return np.maximum(np.cumsum(second.reshape(rows, size), axis=1)[:, 1 : AXIS_BINS + 1], 0.0)

    def _note_lengths(
        self,
        near: NDArray[np.float64],
        far: NDArray[np.float64],
        length: NDArray[np.float64],
        flags: NDArray[np.uint8],
    ) -> None:
        """Keep lengths of streaks that show a whole exposure: uncut, uncrowded, not born during the exposure."""
        whole = ((flags & _IN_PART) == 0) & (near > 0.25 * length)
        if not whole.any():
            return
        middle = 0.5 * (near + far)[whole]
        reach = self._low_mm + self._step_mm * AXIS_BINS
        at = np.clip((middle / reach * SPEED_BINS).astype(np.intp), 0, SPEED_BINS - 1)
        size = (np.log(np.maximum(length[whole], 1e-9) / LENGTH_LOW_MM) / LENGTH_STEP).astype(np.intp)
        size = np.clip(size, 0, LENGTH_BINS - 1)
        self._lengths += np.bincount(at * LENGTH_BINS + size, minlength=SPEED_BINS * LENGTH_BINS).reshape(
            SPEED_BINS, LENGTH_BINS
        )

    def figures(self) -> Figures:
        """Figures of everything added so far; NaN where there is nothing to tell them from."""
        self._work_up()
        sums = self._sums
        exposure_m = sums.exposure_mm / 1000.0
        low, high = poisson_limits(sums.bursts, exposure_m)
        reach, reach_low, reach_high = self._reach()
        cut = self._cut_share(reach)
        return Figures(
            begin_s=self._begin_s,
            end_s=self._end_s,
            frames_seen=sums.frames_seen,
            frames_skipped=sums.frames_skipped,
            streaks=sums.streaks,
            bursts=sums.bursts,
            track_m=sums.track_mm / 1000.0,
            exposure_m=exposure_m,
            burst_rate_per_m=sums.bursts / exposure_m if exposure_m > 0.0 else math.nan,
            burst_rate_low_per_m=low,
            burst_rate_high_per_m=high,
            reach_mm=reach,
            reach_low_mm=reach_low,
            reach_high_mm=reach_high,
            cut_share=cut,
            reach_truncated=cut > TRUNCATED_SHARE,
            streaks_per_frame=sums.streaks / sums.frames_seen if sums.frames_seen else math.nan,
            spark_speed_m_s=self._speed(),
            bursts_listed=sums.bursts_listed,
            streak_peak_dn=math.exp(sums.log_peak / sums.peak_streaks) if sums.peak_streaks else math.nan,
            streak_width_px=math.exp(sums.log_width / sums.width_streaks) if sums.width_streaks else math.nan,
        )

    def _reach(self) -> tuple[float, float, float]:
        """Reach and its 95 % limits (mm).

        Reach r solves F(r) = 0.9. Its error is that of F at r over the density there; F is a ratio of sums over
        blocks, so its variance is the long-run variance of the blocks' influences u = inside - 0.9 total, with
        Bartlett weights over a particle's life (Newey & West, Econometrica 55, 1987), and a t quantile for the few
        independent stretches that a short window holds.
        """
        if not self._blocks or self._sums.track_mm <= 0.0:
            return math.nan, math.nan, math.nan
        first, last = min(self._blocks), max(self._blocks)
        profiles = np.zeros((last - first + 1, AXIS_BINS)) if last - first < 10_000 else None
        if profiles is None:  # hours apart: order still matters, gaps do not
            profiles = np.array([self._blocks[key] for key in sorted(self._blocks)])
        else:
            for key, profile in self._blocks.items():
                profiles[key - first] = profile
        total = profiles.sum(axis=0)
        running = np.cumsum(total)
        whole = running[-1]
        at = int(np.searchsorted(running, REACH_SHARE * whole))
        before = running[at - 1] if at else 0.0
        part = (REACH_SHARE * whole - before) / total[at]
        reach = float(self._low_mm + self._step_mm * (at + part))
        inside = profiles[:, :at].sum(axis=1) + part * profiles[:, at]
        influence = inside - REACH_SHARE * profiles.sum(axis=1)
        wide = max(4, AXIS_BINS // 32)
        window = total[max(0, at - wide) : at + wide + 1]
        density = float(window.sum()) / (len(window) * self._step_mm)
        lags = min(round(LIFE_S / self._block_s), max(0, len(influence) - 1) // 3)
        variance = float(influence @ influence)
        for lag in range(1, lags + 1):
            variance += 2.0 * (1.0 - lag / (lags + 1.0)) * float(influence[lag:] @ influence[:-lag])
        count = len(influence)
        if count < 2 or density <= 0.0:
            return reach, math.nan, math.nan
        variance = max(variance, 0.25 * float(influence @ influence)) * count / (count - 1.0)
        freedom = max(1.0, count / (1.0 + 2.0 * lags / 3.0) - 1.0)
        half = float(stdtrit(freedom, 0.975)) * math.sqrt(variance) / density
        return reach, max(0.0, reach - half), reach + half

    def _cut_share(self, reach: float) -> float:
        """Share of the track that leaves the picture.

        Track per unit of distance equals the number of particles that pass there during exposures; so the streaks
        cut at the far side, each times the path still to come, are the unseen track. The path to come is the decay
        length of the seen profile over its last part.
        """
        sums = self._sums
        if not sums.cut_streaks or sums.track_mm <= 0.0:
            return 0.0 if sums.track_mm > 0.0 else math.nan
        total = sum(self._blocks.values(), np.zeros(AXIS_BINS))
        filled = np.nonzero(np.cumsum(total) < 0.999 * total.sum())[0]
        edge = self._low_mm + self._step_mm * (int(filled[-1]) + 1 if filled.size else 1)
        centres = self._low_mm + self._step_mm * (np.arange(AXIS_BINS) + 0.5)
        late = float(total[(centres > 0.85 * edge) & (centres <= edge)].sum())
        early = float(total[(centres > 0.70 * edge) & (centres <= 0.85 * edge)].sum())
        beyond = edge
        if late > 0.0 and early > late:
            beyond = min(edge, 0.15 * edge / math.log(early / late))
        unseen = sums.cut_streaks * beyond
        return unseen / (unseen + sums.track_mm)

    def _speed(self) -> float:
        """Speed near the wheel (m/s): usual streak length along the axis, extrapolated to the contact.

        Usual is the mode of length, weighted by length: pieces of broken streaks and arms of bursts are many and
        short, whole exposures carry the track and are alike. Nearer than three quarters of a streak to the contact
        most streaks are born within the exposure, so the fit begins there.
        """
        counts = self._lengths.sum(axis=1)
        used = np.nonzero(counts >= LEAST_SPEED_STREAKS)[0]
        if not used.size:
            return math.nan
        weights = self._lengths[used] * np.exp(np.arange(LENGTH_BINS) * LENGTH_STEP)
        usual = _modes(weights)
        middle = (used + 0.5) / SPEED_BINS * (self._low_mm + self._step_mm * AXIS_BINS)
        whole = middle >= 0.75 * usual.max()
        if whole.any():
            used, usual, middle = used[whole], usual[whole], middle[whole]
        # near the wheel: drag has not yet sorted the particles by size
        near = slice(0, max(3, SPEED_BINS // 4))
        used, usual, middle = used[near], usual[near], middle[near]
        share = counts[used] / counts[used].sum()
        length = float(share @ usual)
        if len(used) >= 3:
            log, centre = np.log(usual), float(share @ middle)
            weight = share * (middle - centre)  # least squares, weighted by the number of streaks
            slope = float(weight @ log) / float(weight @ middle)
            if slope < 0.0:
                length = math.exp(float(share @ log) - slope * centre)
        return length / self.optics.exposure_ms


_SMOOTH = np.array([1.0, 2.0, 3.0, 4.0, 3.0, 2.0, 1.0]) / 16.0


_NEAR = 4
"""Bins to either side of the heaviest that its centre is taken over."""


def _modes(weights: NDArray[np.float64]) -> NDArray[np.float64]:
    """Length (mm) at the mode of histograms (N, bins) of its logarithm: the centre of the heaviest stretch."""
    rows, bins = weights.shape
    padded = np.zeros((rows, bins + 2 * _NEAR))
    padded[:, _NEAR:-_NEAR] = weights
    first = _NEAR - len(_SMOOTH) // 2
    smooth = sum(share * padded[:, first + k : first + k + bins] for k, share in enumerate(_SMOOTH))
    at = np.argmax(smooth, axis=1)
    place = np.arange(2 * _NEAR + 1)
    part = np.take_along_axis(padded, at[:, None] + place, axis=1)
    centre = at - _NEAR + (part @ place) / part.sum(axis=1) + 0.5
    return np.asarray(LENGTH_LOW_MM * np.exp(centre * LENGTH_STEP))
