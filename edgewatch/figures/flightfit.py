"""Particle radius and launch speed from streaks that are linked over frames: a commissioning aid.

At high frame rates a particle moves less than its distance to its neighbours, so its streaks can be linked; how it
slows down then tells its size, and run back to the contact its launch speed. Air drags a small particle more: for one
radius speed over way is one curve (the drag law at the temperature of the film around a glowing particle), on which
launch speed only says where the flight begins.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from edgewatch.rehearsal import flight, heat
from edgewatch.sight.detections import StreakFlag
from edgewatch.sight.optics import Optics

Array = NDArray[np.float64]

FILM_K = 1000.0
"""Mean of air and a glowing particle's surface (K): drag is taken at this temperature. Viscosity goes with its 0.7th
power and radius with the root of viscosity, so 150 K more or less move the fitted radius by about five percent."""
ALONG_SHARE, ACROSS_SHARE = 0.15, 0.05
"""A streak continues another if it lies within these shares of the predicted step, along and across it ..."""
ALONG_PX, ACROSS_PX = 3.0, 2.0
"""... or within these distances (px), whichever is more."""
LONGEST_STEP_PX = 80.0
"""A particle that moves further than this from frame to frame cannot be told from its neighbours."""
SLOWEST_PERIOD_S = 0.0025
"""Below 400 frames a second only the largest particles, which glow longest, show streaks enough: no sample of all."""
LEAST_FRAMES = 6
"""A chain of fewer streaks says nothing about drag: position noise of half a pixel swamps the curvature."""
MOST_CHAINS = 20_000
"""Chains kept: far more than a commissioning needs; later ones are not taken."""
MOST_RESIDUAL_PX = 1.2
"""A chain that the flight fits worse than this (rms, px) was linked wrongly, or burst on the way."""
RADII_UM = np.geomspace(10.0, 160.0, 49)
"""Radii tried (micrometre); between them the best is interpolated."""
FASTEST_M_S = 120.0
"""Speed at which the tables begin."""
_TABLE_S, _TABLE_STEP_S = 0.16, 0.0005


@dataclass(slots=True)
class _Chain:
    t_s: list[float] = field(default_factory=list)
    x_px: list[float] = field(default_factory=list)
    y_px: list[float] = field(default_factory=list)


@dataclass(frozen=True, slots=True, kw_only=True)
class FlightFit:
    """What the flights say. Radii in micrometre, speeds in m/s; NaN without particles.

    ``chains``: linked streaks of at least six frames; ``particles``: of these, fitted well. ``radius_um`` and
    ``launch_speed_m_s``: medians with quartiles; ``residual_px``: median rms of the fits.
    ``usable``: whether the frame rate is high enough; otherwise nothing is fitted.
    """

    chains: int
    particles: int
    radius_um: float
    radius_low_um: float
    radius_high_um: float
    launch_speed_m_s: float
    launch_speed_low_m_s: float
    launch_speed_high_m_s: float
    residual_px: float
    usable: bool


class FlightLinker:
    """Takes the streaks of every frame in order and links those of one particle."""

    def __init__(self, optics: Optics) -> None:
        self.optics = optics
        self._open: list[_Chain] = []
        self._velocity: Array = np.zeros((0, 2))
        self._done: list[_Chain] = []
        self._streaks = 0
        self._long = 0

    def add(self, streaks: NDArray[np.float32], flags: NDArray[np.uint8], t_s: float) -> None:
        """Take one frame: ``streaks`` (N, 4) with ``flags`` (N,) as in ``Detections``, exposed from ``t_s`` (s) on.

        Streaks cut by the edge or crowded are left out: their middle is not the particle's.
        """
        bad = StreakFlag.CUT_BEGIN | StreakFlag.CUT_END | StreakFlag.CROWDED
        good = (np.asarray(flags) & int(bad)) == 0
        lines = np.asarray(streaks, dtype=np.float64)[good]
        lines = lines[np.isfinite(lines).all(axis=1)]
        middle = 0.5 * (lines[:, :2] + lines[:, 2:])
        # as far as the particle flew in the exposure; the period is longer by the dead time
        velocity = (lines[:, 2:] - lines[:, :2]) / self.optics.exposure_s
        step = np.hypot(velocity[:, 0], velocity[:, 1]) * self.optics.period_s
        self._streaks += len(lines)
        self._long += int((step > LONGEST_STEP_PX).sum())
        mate = self._match(middle, t_s)
        chains: list[_Chain] = []
        for row in range(len(lines)):
            chain = self._open[mate[row]] if mate[row] >= 0 else _Chain()
            if chain.t_s:
                dt = t_s - chain.t_s[-1]
                velocity[row] = (middle[row] - (chain.x_px[-1], chain.y_px[-1])) / dt
            chain.t_s.append(t_s)
            chain.x_px.append(float(middle[row, 0]))
            chain.y_px.append(float(middle[row, 1]))
            chains.append(chain)
        taken = set(mate[mate >= 0].tolist())
        self._keep([chain for k, chain in enumerate(self._open) if k not in taken])
        self._open, self._velocity = chains, velocity

    def _match(self, middle: Array, t_s: float) -> NDArray[np.int64]:
        """For each streak the open chain that it continues, or -1; each is the other's nearest."""
        mate = np.full(len(middle), -1, dtype=np.int64)
        if not self._open or not len(middle):
            return mate
        last = np.array([[chain.x_px[-1], chain.y_px[-1]] for chain in self._open])
        dt = t_s - np.array([chain.t_s[-1] for chain in self._open])
        move = self._velocity * dt[:, None]
        length = np.maximum(np.hypot(move[:, 0], move[:, 1]), 1e-9)
        unit = move / length[:, None]
        off = middle[None, :, :] - (last + move)[:, None, :]
        along = off[:, :, 0] * unit[:, None, 0] + off[:, :, 1] * unit[:, None, 1]
        across = off[:, :, 1] * unit[:, None, 0] - off[:, :, 0] * unit[:, None, 1]
        along /= np.maximum(ALONG_PX, ALONG_SHARE * length)[:, None]
        across /= np.maximum(ACROSS_PX, ACROSS_SHARE * length)[:, None]
        cost = np.maximum(np.abs(along), np.abs(across))
        cost[length > LONGEST_STEP_PX] = np.inf
        best_chain, best_streak = cost.argmin(axis=0), cost.argmin(axis=1)
        rows = np.arange(len(middle))
        mutual = (best_streak[best_chain] == rows) & (cost[best_chain, rows] <= 1.0)
        mate[mutual] = best_chain[mutual]
        return mate

    def _keep(self, chains: list[_Chain]) -> None:
        room = MOST_CHAINS - len(self._done)
        self._done += [chain for chain in chains if len(chain.t_s) >= LEAST_FRAMES][: max(0, room)]

    def fit(self) -> FlightFit:
        """Fit all chains so far. Cost: about a millisecond a chain."""
        chains = self._done + [chain for chain in self._open if len(chain.t_s) >= LEAST_FRAMES]
        usable = self.optics.period_s <= SLOWEST_PERIOD_S and self._long <= 0.5 * self._streaks
        radius, speed, residual = _fit_chains(chains if usable else [], self.optics)
        good = np.isfinite(residual) & (residual <= MOST_RESIDUAL_PX)
        # a radius at the end of those tried is a curvature that the noise has made
        good &= (radius > RADII_UM[0] * 1.01) & (radius < RADII_UM[-1] / 1.01)
        quartiles = (25.0, 50.0, 75.0)
        r = np.percentile(radius[good], quartiles) if good.any() else np.full(3, math.nan)
        v = np.percentile(speed[good], quartiles) if good.any() else np.full(3, math.nan)
        return FlightFit(
            chains=len(chains),
            particles=int(good.sum()),
            radius_low_um=float(r[0]),
            radius_um=float(r[1]),
            radius_high_um=float(r[2]),
            launch_speed_low_m_s=float(v[0]),
            launch_speed_m_s=float(v[1]),
            launch_speed_high_m_s=float(v[2]),
            residual_px=float(np.median(residual[good])) if good.any() else math.nan,
            usable=usable,
        )


def _slowing_tables() -> tuple[Array, Array]:
    """Way (m) and speed (m/s) from ``FASTEST_M_S`` on, (radii, times): drag alone, at film temperature."""
    film = np.array(FILM_K)
    density, viscosity, _ = (float(value) for value in heat.film_properties(film))
    radius = RADII_UM * 1e-6
    steps = round(_TABLE_S / _TABLE_STEP_S)
    speed = np.full(len(radius), FASTEST_M_S)
    way = np.zeros(len(radius))
    ways, speeds = [way], [speed]

    def slowing(v: Array) -> Array:
        reynolds = density * v * 2.0 * radius / viscosity
        factor = 0.375 * density / (heat.IRON_DENSITY_KG_M3 * radius)
        return np.asarray(factor * flight.drag_coefficient(reynolds) * v * v)

    for _ in range(steps):
        middle = speed - 0.5 * _TABLE_STEP_S * slowing(speed)
        after = speed - _TABLE_STEP_S * slowing(np.maximum(middle, 1e-3))
        way = way + _TABLE_STEP_S * np.maximum(middle, 1e-3)
        speed = np.maximum(after, 1e-3)
        ways.append(way)
        speeds.append(speed)
    return np.stack(ways, axis=1), np.stack(speeds, axis=1)


def _fit_chains(chains: list[_Chain], optics: Optics) -> tuple[Array, Array, Array]:
    """Radius (micrometre), launch speed (m/s) and rms residual (px) of each chain."""
    radius, speed, residual = (np.full(len(chains), math.nan) for _ in range(3))
    if not chains:
        return radius, speed, residual
    ways, speeds = _slowing_tables()
    metre_per_px = optics.mm_per_px * 1e-3
    for row, chain in enumerate(chains):
        t = np.array(chain.t_s)
        points = np.stack([chain.x_px, chain.y_px], axis=1) - optics.contact_px
        way = _way_from_contact(points) * metre_per_px
        fitted = _fit_one(t - t[0], way, ways, speeds)
        if fitted is not None:
            radius[row], speed[row], error = fitted
            residual[row] = error / metre_per_px
    return radius, speed, residual


def _way_from_contact(points: Array) -> Array:
    """Distance along the chain's own line from its foot nearest the contact point (px)."""
    centre = points.mean(axis=0)
    _, _, axes = np.linalg.svd(points - centre, full_matrices=False)
    axis = axes[0] if axes[0] @ (points[-1] - points[0]) >= 0.0 else -axes[0]
    return np.asarray(points @ axis)


def _fit_one(t_s: Array, way_m: Array, ways: Array, speeds: Array) -> tuple[float, float, float] | None:
    """Best radius for one chain, launch speed at way 0, rms error (m); None where no flight fits.

    For each radius two numbers are left: when on the curve the chain begins (by Newton's method) and where (linear).
    """
    axis_s = np.arange(ways.shape[1]) * _TABLE_STEP_S
    mean_speed = (way_m[-1] - way_m[0]) / (t_s[-1] - t_s[0])
    if not 1.0 < mean_speed < 0.9 * FASTEST_M_S:
        return None
    errors = np.full(len(ways), np.inf)
    starts = np.zeros((len(ways), 2))
    half = 0.5 * (t_s[-1] - t_s[0])
    for k in range(len(ways)):
        # where the curve has the chain's mean speed is the chain's middle
        start = float(np.interp(-mean_speed, -speeds[k], axis_s)) - half
        for _ in range(4):
            start = min(max(start, 0.0), axis_s[-1] - t_s[-1])
            on = np.interp(start + t_s, axis_s, ways[k])
            slope = np.interp(start + t_s, axis_s, speeds[k])
            off = way_m - on
            offset, bend = off.mean(), slope - slope.mean()
            start += float(bend @ (off - offset) / max(float(bend @ bend), 1e-12))
        start = min(max(start, 0.0), axis_s[-1] - t_s[-1])
        off = way_m - np.interp(start + t_s, axis_s, ways[k])
        errors[k] = float(((off - off.mean()) ** 2).mean())
        starts[k] = start, off.mean()
    best = int(errors.argmin())
    place, share = float(best), 0.0
    if 0 < best < len(errors) - 1:
        left, here, right = errors[best - 1 : best + 2]
        bend = left - 2.0 * here + right
        share = float(np.clip(0.5 * (left - right) / bend, -0.5, 0.5)) if bend > 0.0 else 0.0
        place = best + share
    radius = float(np.exp(np.interp(place, np.arange(len(RADII_UM)), np.log(RADII_UM))))
    launch = float(np.interp(-starts[best, 1], ways[best], speeds[best]))
    side = best + (1 if share > 0.0 else -1)
    if share != 0.0 and 0 <= side < len(ways):
        beside = float(np.interp(-starts[side, 1], ways[side], speeds[side]))
        launch += abs(share) * (beside - launch)
    if not starts[best, 1] <= 0.0:  # the curve would have to begin faster than its first speed
        return None
    return radius, launch, math.sqrt(errors[best])
