"""Figures of a stream without its pictures: thousands of particles in a fraction of a second.

What a perfect sight would say: every part of a flight that stands five noise deviations above the ground is seen, every
burst is counted. For questions about bars by the thousand: wear, force, grades, bands.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

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


def _weighted_quantile(values: NDArray[np.float64], weights: NDArray[np.float64], share: float) -> float:
    if not len(values):
        return math.nan
    order = np.argsort(values)
    total = np.cumsum(weights[order])
    if total[-1] <= 0.0:
        return math.nan
    return float(np.interp(share * total[-1], total, values[order]))


@dataclass(frozen=True, slots=True, eq=False)
class _Steps:
    """Every step of every flight that is seen: which window, where (mm), how long (m), how fast (m/s)."""

    window: NDArray[np.int64]
    place_mm: NDArray[np.float64]
    way_m: NDArray[np.float64]
    speed_m_s: NDArray[np.float64]
    exposed_m: NDArray[np.float64]


def _seen_steps(swarm: Swarm, height: LineHeight, mm_per_px: float, window_s: float, windows: int) -> _Steps:
    parts: list[tuple[NDArray[Any], ...]] = []
    exposed = np.zeros(windows)
    for group, tables in swarm.tables():
        x, y = tables["x"].astype(np.float64), tables["y"].astype(np.float64)
        way = np.hypot(np.diff(x, axis=1), np.diff(y, axis=1))
        birth = swarm.pieces["birth_s"][group]
        steps = (swarm.pieces["end_s"][group] - birth) / flight.STEP_S
        # share of each step that the piece lives to see
        lives = np.clip(steps[:, None] - np.arange(way.shape[1]), 0.0, 1.0)
        speed_px_s = np.maximum(way / flight.STEP_S, 1e-3)
        middle = 0.5 * (tables["log_e_s"][:, 1:] + tables["log_e_s"][:, :-1])
        used = (height(np.exp(middle) / speed_px_s) >= DETECTABLE_SNR) & (lives > 0.0)
        window = np.clip(birth // window_s, 0, windows - 1).astype(np.int64)
        parts.append(
            (
                np.broadcast_to(window[:, None], used.shape)[used],
                (0.5 * (x[:, 1:] + x[:, :-1]) * mm_per_px)[used],
                (way * lives * (mm_per_px * 1e-3))[used],
                (speed_px_s * (mm_per_px * 1e-3))[used],
            )
        )
        acted = (np.diff(tables["exposed_m"], axis=1) * lives).sum(axis=1)
        exposed += np.bincount(window, weights=acted, minlength=windows)
    columns = [np.concatenate(column) for column in zip(*parts, strict=True)] if parts else [np.zeros(0)] * 4
    return _Steps(columns[0].astype(np.int64), columns[1], columns[2], columns[3], exposed)


def outline_windows(
    steel: Steel,
    *,
    sparks: int,
    windows: int,
    wheel_speed_m_s: float,
    rng: np.random.Generator,
    sparks_per_s: float = 4000.0,
    mm_per_px: float = 1.0,
    camera: CameraModel | None = None,
    spray: Spray | None = None,
) -> tuple[Outline, ...]:
    """Fly about ``sparks`` particles of one contact and take the figures of each of ``windows`` equal parts of it.

    ``sparks_per_s``: density of the stream, which moves the air. The picture is as long as the stream; a particle
    belongs to the window in which it is launched. Cost: about 50 microseconds a particle. Raises ``ValueError`` for
    values out of range.
    """
    if not 1 <= sparks <= 1_000_000:
        raise ValueError(f"sparks = {sparks!r}: allowed is 1 to 1000000")
    if not 1 <= windows <= 10_000:
        raise ValueError(f"windows = {windows!r}: allowed is 1 to 10000")
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
    steps = _seen_steps(swarm, LineHeight(camera), mm_per_px, seconds / windows, windows)
    struck = np.clip(swarm.bursts["t_s"] // (seconds / windows), 0, windows - 1).astype(np.int64)
    bursts = np.bincount(struck, minlength=windows)
    drawn = []
    for window in range(windows):
        mine = steps.window == window
        place, way, speed = steps.place_mm[mine], steps.way_m[mine], steps.speed_m_s[mine]
        near = (place > NEAR_MM[0]) & (place < NEAR_MM[1])
        drawn.append(
            Outline(
                sparks=round(sparks * steel.stream / windows),
                track_m=float(way.sum()),
                exposed_m=float(steps.exposed_m[window]),
                bursts=int(bursts[window]),
                reach_mm=_weighted_quantile(place, way, REACH_SHARE),
                length_mm=_weighted_quantile(place, way, 0.99),
                spark_speed_m_s=_weighted_quantile(speed[near], way[near], 0.5),
            )
        )
    return tuple(drawn)


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
    """Figures of one stretch of a stream as a whole; see ``outline_windows``."""
    (drawn,) = outline_windows(
        steel,
        sparks=sparks,
        windows=1,
        wheel_speed_m_s=wheel_speed_m_s,
        rng=rng,
        sparks_per_s=sparks_per_s,
        mm_per_px=mm_per_px,
        camera=camera,
        spray=spray,
    )
    return drawn
