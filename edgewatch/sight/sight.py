"""Sight: pictures in, detections out, with the memory that this takes."""

from __future__ import annotations

from dataclasses import dataclass, fields

import numpy as np
from numpy.typing import NDArray

from edgewatch.sight.background import Background
from edgewatch.sight.bursts import find_apexes
from edgewatch.sight.detections import BurstFlag, Detections, StreakFlag
from edgewatch.sight.glow import LATE_SURE, Glow, sort_lines
from edgewatch.sight.lengths import Lengths
from edgewatch.sight.light import LightMeter
from edgewatch.sight.optics import Optics
from edgewatch.sight.ridges import MARGIN_PX, NOISE_GAIN, Ridges, find_ridges
from edgewatch.sight.segments import find_segments
from edgewatch.sight.share import BurstShare
from edgewatch.sight.steadiness import read_origin
from edgewatch.sight.streaks import find_streaks


@dataclass(frozen=True, slots=True, kw_only=True)
class SightTuning:
    """What may be tuned, in physical or noise units. Raises ``ValueError`` naming the field that is out of range.

    ``least_snr``: a streak stands this many noise deviations above the background. ``least_length_px``: and is longer
    than this. ``least_sure``: probability from which a candidate is listed as a burst; ``rate_sure``: from which it
    counts for the burst-rate, which false bursts would lift where there are few. ``longest_glow_s``: no arm glows for
    longer. ``arm_draw_s``: arms that drew for less are not seen. ``late_listed_s``: bursts that went off up to this
    long before the exposure are listed.
    """

    least_snr: float = 4.7
    least_length_px: float = 6.0
    least_sure: float = 0.4
    rate_sure: float = 0.65
    longest_glow_s: float = 0.0035
    arm_draw_s: float = 0.00035
    late_listed_s: float = 0.0008

    def __post_init__(self) -> None:
        """Check ranges once."""
        for one in fields(self):
            value = getattr(self, one.name)
            if not 0.0 < value <= 1000.0:
                raise ValueError(f"{one.name} = {value!r}: allowed is above 0 to 1000")


class Sight:
    """Looks at the pictures of one camera, in order. Deterministic; the first picture is already judged.

    Sources of the method: see ``background``, ``ridges``, ``streaks``, ``bursts``, ``glow``.
    """

    def __init__(self, optics: Optics, settings: SightTuning | None = None) -> None:
        """``optics`` gives picture size, contact point, axis and timing."""
        self.optics = optics
        self.settings = settings or SightTuning()
        self._scratch = np.full(optics.height_px * optics.width_px, -1, np.int32)
        self.reset()

    def reset(self) -> None:
        """Forget every picture seen."""
        o, s = self.optics, self.settings
        self._background = Background(period_s=o.period_s)
        self._lengths = Lengths(o.contact_px)
        self._meter = LightMeter()
        self._before: Ridges | None = None
        self._share = BurstShare(period_s=o.period_s)
        self._glow, self._rate_glow = (
            Glow(o, longest_glow_s=s.longest_glow_s, arm_draw_s=s.arm_draw_s, late_listed_s=s.late_listed_s)
            for _ in range(2)
        )

    @property
    def burst_exposure_gain(self) -> float:
        """Time a picture in which a burst would get listed, per exposure."""
        return self._glow.gain

    def look(self, picture: NDArray[np.uint8]) -> Detections:
        """Streaks and bursts of the next picture, uint8 (H, W). Raises ``ValueError`` on another shape or type.

        Cost: some dense passes of 8-bit and float32 arithmetic, then work in proportion to the lit pixels.
        """
        o, s = self.optics, self.settings
        if not isinstance(picture, np.ndarray) or picture.dtype != np.uint8:
            raise ValueError(f"picture: uint8 array needed, got {getattr(picture, 'dtype', type(picture).__name__)}")
        if picture.shape != (o.height_px, o.width_px):
            raise ValueError(f"picture: shape {(o.height_px, o.width_px)} needed, got {picture.shape}")
        excess = self._background.excess(picture)
        if self._background.settled:  # what was learnt while the ground was not yet known is not to be relied on
            self._lengths, self._meter = Lengths(o.contact_px), LightMeter()
        ridges = find_ridges(excess, self._background.noise_dn)
        noise = self._background.noise_dn * NOISE_GAIN
        pieces = find_segments(ridges, self._scratch)
        found = find_streaks(pieces, ridges.blurred, noise, self._lengths, o.axis)
        self._meter.measure_width(found.begin, found.end, ridges)
        apexes = find_apexes(pieces, ridges, o, s.least_sure, self._before, self._share)
        self._before = ridges
        sorted_ = sort_lines(found.begin, found.end, found.whole, apexes, self._glow, self._lengths)
        begin, end = sorted_.begin, sorted_.end
        length = np.hypot(end[:, 0] - begin[:, 0], end[:, 1] - begin[:, 1])
        snr = found.level / self._background.noise_dn * self._meter.line_gain
        keep = sorted_.streak & (snr >= s.least_snr) & (length > s.least_length_px)
        lines = np.concatenate([begin, end], axis=1)[keep]
        fresh = self._glow.take(apexes, self._lengths)
        at, late = apexes.at[fresh], apexes.late[fresh] > LATE_SURE
        track_px = float(length[keep].sum())
        snr = snr[keep]
        origin_offset_px, origin_error_px = read_origin(lines, o)
        return Detections(
            streaks=lines.astype(np.float32),
            streak_snr=snr.astype(np.float32),
            streak_flags=self._cut_flags(lines),
            bursts=at.astype(np.float32),
            burst_arms=sorted_.arms[fresh].astype(np.int16),
            burst_flags=np.where(late, BurstFlag.LATE, 0).astype(np.uint8) | self._edge_flags(at),
            light=self._meter.read(picture, self._background, lines, snr),
            rate_bursts=int(self._rate_glow.take(apexes.take(apexes.sure >= s.rate_sure), self._lengths).size),
            rate_exposure_px=track_px * self._glow.gain,
            origin_offset_px=origin_offset_px,
            origin_error_px=origin_error_px,
        )

    def _near_edge(self, x: NDArray[np.float64], y: NDArray[np.float64], margin_px: float) -> NDArray[np.bool_]:
        o = self.optics
        return np.asarray(
            (x < margin_px) | (y < margin_px) | (x > o.width_px - 1 - margin_px) | (y > o.height_px - 1 - margin_px)
        )

    def _cut_flags(self, lines: NDArray[np.float64]) -> NDArray[np.uint8]:
        flags = np.zeros(len(lines), np.uint8)
        flags[self._near_edge(lines[:, 0], lines[:, 1], CUT_PX)] |= np.uint8(StreakFlag.CUT_BEGIN)
        flags[self._near_edge(lines[:, 2], lines[:, 3], CUT_PX)] |= np.uint8(StreakFlag.CUT_END)
        return flags

    def _edge_flags(self, at: NDArray[np.float64]) -> NDArray[np.uint8]:
        near = self._near_edge(at[:, 0], at[:, 1], EDGE_PX)
        flags: NDArray[np.uint8] = np.where(near, BurstFlag.EDGE, 0).astype(np.uint8)
        return flags


CUT_PX = MARGIN_PX + 2.0
"""A streak that comes this near to the picture's edge leaves it: ridge points end at the margin (px)."""

EDGE_PX = 10.0
"""A burst this near to the edge may have arms outside (px)."""
