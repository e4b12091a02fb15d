"""Figures of a stream without its pictures: thousands of particles in a fraction of a second.

What a perfect sight would say: every part of a flight that stands five noise deviations above the ground is seen, every
burst is counted. For questions about bars by the thousand: wear, force, grades, bands.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from edgewatch.rehearsal import flight
from edgewatch.rehearsal.camera import CameraModel
from edgewatch.rehearsal.sensor import LineHeight
from edgewatch.rehearsal.steel import Steel
from edgewatch.rehearsal.swarm import Conditions, Spray, Swarm
from edgewatch.sight.optics import Optics

REACH_SHARE = 0.9
DETECTABLE_SNR = 5.0
NEAR_MM = (40.0, 120.0)
"""Where speed "near the wheel" is taken: beyond the glow of the contact, before drag has told (mm)."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Outline:
    """Figures of one stretch of a stream, as ``figures.Figures`` defines them; NaN without track.

    ``track_m``: seen; ``exposed_m``: on which the hazard acts; ``bursts``: struck inside the picture's width;
    ``length_mm``: distance that 99 % of the track lies within, what the eye calls the stream's length.
    """

    sparks: int
    track_m: float
    exposed_m: float
    bursts: int
    reach_mm: float
    length_mm: float
    spark_speed_m_s: float

    @property
    def burst_rate_per_m(self) -> float:
        """Bursts per metre of seen track."""
        return self.bursts / self.track_m if self.track_m > 0.0 else math.nan


def _weighted_quantile(values: np.ndarray, weights: np.ndarray, share: float) -> float:
    if not len(values):
        return math.nan
    order = np.argsort(values)
    total = np.cumsum(weights[order])
    if total[-1] <= 0.0:
        return math.nan
    return float(np.interp(share * total[-1], total, values[order]))


def outline(
    steel: Steel,
    *,
    sparks: int,
    wheel_speed_m_s: float,
    rng: np.random.Generator,
    sparks_per_s: float = 4000.0,
    mm_per_px: float = 1.0,
    camera: CameraModel | None = None,
    spray: Spray | None = None,
) -> Outline:
    """Fly about ``sparks`` particles and take the figures of the stream that they make.

    ``sparks_per_s``: density of the stream, which moves the air. The picture is as long as the stream.
    Cost: about 50 microseconds a particle. Raises ``ValueError`` for values out of range.
    """
    if not 1 <= sparks <= 1_000_000:
        raise ValueError(f"sparks = {sparks!r}: allowed is 1 to 1000000")
    camera = camera or CameraModel()
    optics = Optics(
        width_px=64, height_px=64, mm_per_px=mm_per_px, contact_px=(0.0, 0.0), direction_deg=0.0, exposure_ms=1, fps=1
    )
    seconds = sparks / sparks_per_s
    now = Conditions(
        begin_s=0.0, end_s=seconds, steel=steel, sparks_per_s=sparks_per_s, wheel_speed_m_s=wheel_speed_m_s
    )
    swarm = Swarm(
        optics,
        [now],
        spray=spray or Spray(),
        light=camera.light,
        band=camera.band,
        rng=rng,
        batch_sparks=1e6,
        batch_s=math.inf,
    )
    swarm.launch_until(seconds, keep_from_s=0.0)
    height = LineHeight(camera)
    along, weights, speeds, speed_weights, exposed = [], [], [], [], 0.0
    for group, tables in swarm.tables():
        x, y = tables["x"].astype(np.float64), tables["y"].astype(np.float64)
        way = np.hypot(np.diff(x, axis=1), np.diff(y, axis=1))
        steps = (swarm.pieces["end_s"][group] - swarm.pieces["birth_s"][group]) / flight.STEP_S
        # share of each step that the piece lives to see
        lives = np.clip(steps[:, None] - np.arange(way.shape[1]), 0.0, 1.0)
        speed_px_s = np.maximum(way / flight.STEP_S, 1e-3)
        middle = 0.5 * (tables["log_e_s"][:, 1:] + tables["log_e_s"][:, :-1])
        seen = height(np.exp(middle) / speed_px_s) >= DETECTABLE_SNR
        metres = way * lives * (mm_per_px * 1e-3)
        centre_mm = 0.5 * (x[:, 1:] + x[:, :-1]) * mm_per_px
        weight = metres * seen
        used = weight > 0.0
        along.append(centre_mm[used])
        weights.append(weight[used])
        near = used & (centre_mm > NEAR_MM[0]) & (centre_mm < NEAR_MM[1])
        speeds.append(speed_px_s[near] * mm_per_px * 1e-3)
        speed_weights.append(weight[near])
        exposed += float((np.diff(tables["exposed_m"], axis=1) * lives).sum())
    place = np.concatenate(along) if along else np.zeros(0)
    weight = np.concatenate(weights) if weights else np.zeros(0)
    return Outline(
        sparks=round(sparks * steel.stream),
        track_m=float(weight.sum()),
        exposed_m=exposed,
        bursts=len(swarm.bursts),
        reach_mm=_weighted_quantile(place, weight, REACH_SHARE),
        length_mm=_weighted_quantile(place, weight, 0.99),
        spark_speed_m_s=_weighted_quantile(
            np.concatenate(speeds) if speeds else place, np.concatenate(speed_weights) if speeds else weight, 0.5
        ),
    )
