"""Sight: pictures in, detections out, with the memory that this takes."""

from __future__ import annotations

from dataclasses import dataclass, fields

import numpy as np
from numpy.typing import NDArray

from edgewatch.sight.background import Background
from edgewatch.sight.bursts import Workroom, find_apexes
from edgewatch.sight.detections import Detections
from edgewatch.sight.glow import Glow
from edgewatch.sight.lengths import Lengths
from edgewatch.sight.light import LightMeter
from edgewatch.sight.listing import Listing
from edgewatch.sight.optics import Optics
from edgewatch.sight.ridges import NOISE_GAIN, Ridges, find_ridges
from edgewatch.sight.segments import find_segments
from edgewatch.sight.share import BurstShare
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
    late_listed_s: float = 0.00105

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
        self._work = Workroom()
        self._glow = Glow(o, longest_glow_s=s.longest_glow_s, arm_draw_s=s.arm_draw_s, late_listed_s=s.late_listed_s)
        self._listing = Listing(
            o,
            self._glow,
            least_snr=s.least_snr,
            least_length_px=s.least_length_px,
            rate_sure=s.rate_sure,
        )

    @property
    def burst_exposure_gain(self) -> float:
        """Time a picture in which a burst would get listed, times the share of bursts that do, per exposure."""
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
        apexes = find_apexes(pieces, ridges, o, s.least_sure, self._before, self._share, self._work)
        self._before = ridges
        snr_per_dn = self._meter.line_gain / self._background.noise_dn
        seen = self._listing.take(found, snr_per_dn, apexes, self._lengths)
        light = self._meter.read(picture, self._background, streaks=len(seen.streaks), middle_snr=seen.middle_snr)
        return Detections(
            streaks=seen.streaks,
            streak_snr=seen.streak_snr,
            streak_flags=seen.streak_flags,
            bursts=seen.bursts,
            burst_arms=seen.burst_arms,
            burst_flags=seen.burst_flags,
            light=light,
            rate_bursts=seen.rate_bursts,
            rate_exposure_px=seen.track_px * self._glow.gain,
            origin_offset_px=seen.origin_offset_px,
            origin_error_px=seen.origin_error_px,
        )
