"""Bursts: where a particle explodes, and the arms it throws.

A burst strikes a flying particle with a constant hazard per metre while it is hot enough (the carbon monoxide that
tears it forms while the particle is hot); so the distance to a burst is exponential and independent of age.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from edgewatch.rehearsal.flight import Paths
from edgewatch.rehearsal.steel import Steel

Array = NDArray[Any]

BURST_LEAST_K = 1450.0
"""Below this a particle does not burst: solid, its reaction died down. Above it the hazard is constant."""
ARM_STOP_MS = 1.2
"""Time constant with which air stops a fragment of about 6 micrometre radius (Stokes at film temperature)."""
ARM_STOP_SPREAD = 0.3
ARM_SPEED_SPREAD = 0.25
"""Deviations of the logarithm, from arm to arm."""
FORK_HALF_ANGLE_DEG = 22.0
"""Outer prongs of a fork leave at about this angle to the flight."""
GOES_ON_RADIUS = 0.8
"""Radius of what flies on after a burst, as a share of the radius before."""
ARM_RADIUS = 0.33
"""Radius of a fragment as a share of its parent's: some thirty fragments hold its mass, most too dull to be drawn."""


def exposed_m(paths: Paths) -> Array:
    """Metres flown so far with the hazard acting, (N, K + 1); a step counts while its later end is hot enough."""
    steps = np.diff(paths.path_m, axis=1)
    steps *= paths.temperature_k[:, 1:] >= BURST_LEAST_K
    total = np.zeros_like(paths.path_m)
    np.cumsum(steps, axis=1, out=total[:, 1:])
    return total


def strike(exposed: Array, hazard_per_m: float, rng: np.random.Generator) -> Array:
    """Where each flight bursts, in steps since launch (N,); infinite for those that do not.

    ``exposed``: (N, K + 1), non-decreasing metres with the hazard acting.
    """
    count = len(exposed)
    life = rng.exponential(size=count)
    if hazard_per_m <= 0.0 or count == 0:
        return np.full(count, np.inf)
    life /= hazard_per_m
    after = (exposed < life[:, None]).sum(axis=1)
    struck = after < exposed.shape[1]
    late = np.minimum(after, exposed.shape[1] - 1)
    rows = np.arange(count)
    low, high = exposed[rows, late - 1], exposed[rows, late]
    part = np.divide(life - low, high - low, out=np.zeros(count), where=high > low)
    return np.where(struck, late - 1 + part, np.inf)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Arms:
    """Arms of a batch of bursts, A of each: ``burst`` (index into the batch), ``velocity_m_s`` (A, 3) at the start,
    ``stop_s`` time constant of the way, ``life_s`` time it glows, ``brightness`` relative to its parent's area.
    """

    burst: Array
    velocity_m_s: Array
    stop_s: Array
    life_s: Array
    brightness: Array


def throw_arms(velocity_m_s: Array, forks: Array, steel: Steel, rng: np.random.Generator) -> Arms:
    """Arms of B bursts whose particles fly at ``velocity_m_s`` (B, 3); ``forks`` (B,) says which are forks.

    A star throws its arms all round, evenly but for chance, on top of the flight; a fork throws three prongs forward.
    """
    count = len(velocity_m_s)
    number = np.where(forks, 3, rng.integers(steel.arms_low, steel.arms_high + 1, size=count))
    burst = np.repeat(np.arange(count), number)
    first = np.repeat(np.cumsum(number) - number, number)
    place = np.arange(len(burst)) - first
    arms = len(burst)
    share = (place + rng.uniform(0.2, 0.8, size=arms)) / number[burst]
    turn = rng.uniform(0.0, 1.0, size=count)[burst]
    fork = forks[burst]
    angle = np.where(
        fork,
        np.deg2rad(FORK_HALF_ANGLE_DEG) * (place - 1.0) + rng.normal(0.0, 0.07, size=arms),
        2.0 * np.pi * (share + turn),
    )
    tilt = np.where(fork, 0.15, 0.5) * rng.normal(size=arms)
    speed = steel.arm_speed_m_s * np.exp(ARM_SPEED_SPREAD * rng.normal(size=arms))
    parent = velocity_m_s[burst]
    forward = parent / np.maximum(np.linalg.norm(parent, axis=1), 1e-6)[:, None]
    across = np.stack([-forward[:, 1], forward[:, 0], np.zeros(arms)], axis=1)
    away = np.stack([np.zeros(arms), np.zeros(arms), np.ones(arms)], axis=1)
    cos, sin = np.cos(angle) * np.cos(tilt), np.sin(angle) * np.cos(tilt)
    thrown = speed[:, None] * (forward * cos[:, None] + across * sin[:, None] + away * np.sin(tilt)[:, None])
    return Arms(
        burst=burst,
        velocity_m_s=thrown + np.where(fork, 0.3, 0.6)[:, None] * parent,
        stop_s=ARM_STOP_MS * 1e-3 * np.exp(ARM_STOP_SPREAD * rng.normal(size=arms)),
        life_s=steel.arm_life_ms * 1e-3 * np.exp(0.2 * rng.normal(size=arms)),
        brightness=ARM_RADIUS**2 * np.exp(0.3 * rng.normal(size=arms)),
    )
