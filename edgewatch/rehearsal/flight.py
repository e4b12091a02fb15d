"""Flight of hot particles through air: drag beyond Stokes, gravity, heating by oxidation, cooling.

All particles of a batch are integrated together, one numpy step of ``step_s`` at a time. Axes as in the picture: x
right, y down (gravity), z away from the camera.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from edgewatch.rehearsal import heat
from edgewatch.rehearsal.steel import Steel

Array = NDArray[Any]

GRAVITY_M_S2 = 9.80665
STEP_S = 0.001
"""Thirty steps of temperature rise; position within 0.05 mm of a step a tenth as long (held by a test)."""
LONGEST_S = 0.2
"""Glow lasts up to about 0.2 s (common practice); the integration ends earlier once all particles are dark."""

LEAST_K, MOST_K = 200.0, 3500.0
"""Temperatures that are integrated: from deep frost to well above the boiling of iron (3134 K). Only dust of a
micrometre, for which the step is too long, ever meets these ends."""


def drag_coefficient(reynolds: Array) -> Array:
    """Drag coefficient of a sphere, Cheng, Powder Technology 189 (2009) 395, good up to Re = 2e5.

    24/Re (1 + 0.27 Re)^0.43 + 0.47 (1 - exp(-0.04 Re^0.38)). Nearer to the standard curve where sparks fly (Re 1 to
    100) than Schiller and Naumann's, and needs no second branch.
    """
    # powers through logarithms: half the time of np.power
    creeping = 24.0 / reynolds * np.exp(0.43 * np.log1p(0.27 * reynolds))
    return np.asarray(creeping - 0.47 * np.expm1(-0.04 * np.exp(0.38 * np.log(reynolds))))


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Launch:
    """Particles at the beginning of their flight, N of each: ``radius_m``, ``position_m`` (N, 3),
    ``velocity_m_s`` (N, 3), ``temperature_k``, ``oxidised`` (share of the iron burnt so far).
    Raises ``ValueError`` naming the field that is out of range.
    """

    radius_m: Array
    position_m: Array
    velocity_m_s: Array
    temperature_k: Array
    oxidised: Array

    def __post_init__(self) -> None:
        """Check ranges once."""
        count = len(self.radius_m)
        for name, low, high, shape in (
            ("radius_m", 1e-7, 1e-2, (count,)),
            ("position_m", -1e3, 1e3, (count, 3)),
            ("velocity_m_s", -500.0, 500.0, (count, 3)),
            ("temperature_k", LEAST_K, MOST_K, (count,)),
            ("oxidised", 0.0, 1.0, (count,)),
        ):
            values = getattr(self, name)
            if values.shape != shape:
                raise ValueError(f"{name}: shape {values.shape}, needed is {shape}")
            if count and not (np.isfinite(values).all() and values.min() >= low and values.max() <= high):
                raise ValueError(f"{name}: allowed is {low:g} to {high:g}")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Paths:
    """A batch of N flights at K + 1 times ``step_s`` apart, from launch: arrays (N, K + 1), vectors (N, K + 1, 3)."""

    step_s: float
    position_m: Array
    velocity_m_s: Array
    temperature_k: Array
    oxidised: Array
    path_m: Array


def fly(
    launch: Launch,
    steel: Steel,
    *,
    duration_s: float = LONGEST_S,
    step_s: float = STEP_S,
    oxygen: float = heat.OXYGEN_MASS_SHARE,
    air_k: float = heat.AIR_K,
    wind_m_s: tuple[float, float, float] = (0.0, 0.0, 0.0),
    until_dark: bool = True,
    isothermal: bool = False,
) -> Paths:
    """Integrate the flight of a batch for ``duration_s``, or until all are dark (``until_dark``).

    Drag: Cheng at film temperature. Heat: Ranz and Marshall, radiation, oxidation limited by diffusion
    through the air, by the surface reaction and by the closing of the oxide shell. ``wind_m_s``: velocity of the air,
    which a dense stream drags along. ``isothermal`` keeps the temperature (drag alone). Second order in
    ``step_s``. Cost: about 50 numpy operations on N values a step.
    Raises ``ValueError`` for times, oxygen share or air temperature out of range.
    """
    for name, value, low, high in (
        ("duration_s", duration_s, 0.0, 100.0),
        ("step_s", step_s, 1e-7, 0.01),
        ("oxygen", oxygen, 0.0, 1.0),
        ("air_k", air_k, 200.0, 600.0),
    ):
        if not (math.isfinite(value) and low <= value <= high):
            raise ValueError(f"{name} = {value!r}: allowed is {low:g} to {high:g}")
    if not all(math.isfinite(part) and abs(part) <= 100.0 for part in wind_m_s):
        raise ValueError(f"wind_m_s = {wind_m_s!r}: allowed are three numbers from -100 to 100")
    count = len(launch.radius_m)
    steps = max(1, round(duration_s / step_s))
    radius = launch.radius_m.astype(np.float64)
    diameter = 2.0 * radius
    position = launch.position_m.astype(np.float64).T.copy()
    velocity = launch.velocity_m_s.astype(np.float64).T.copy()
    kelvin = launch.temperature_k.astype(np.float64).copy()
    burnt = launch.oxidised.astype(np.float64).copy()
    path = np.zeros(count)
    kept: list[tuple[Array, Array, Array, Array, Array]] = [(position, velocity, kelvin, burnt, path)]
    mass_per_area = heat.IRON_DENSITY_KG_M3 * radius / 3.0
    fall = np.array([0.0, GRAVITY_M_S2 * step_s, 0.0])[:, None]
    rate, warmed, burning = np.zeros(count), np.zeros(count), np.zeros(count)
    wind = np.array(wind_m_s, dtype=np.float64)[:, None]
    speed, against = _speed(velocity), _speed(velocity - wind)
    for step in range(steps):
        # drag and heat at mid-step, foreseen with the last step's rates: second order with one evaluation a step
        middle_k = np.clip(kelvin + 0.5 * warmed, LEAST_K, MOST_K)
        middle_burnt = burnt + 0.5 * burning
        film_k = 0.5 * (middle_k + air_k)
        density, viscosity, conductivity = heat.film_properties(film_k)
        reynolds = np.maximum(density * against * np.exp(-0.5 * step_s * rate) * diameter / viscosity, 1e-9)
        rate = (
            drag_coefficient(reynolds) * reynolds * viscosity / (diameter * diameter) * (0.75 / heat.IRON_DENSITY_KG_M3)
        )
        velocity_next = wind + (velocity - wind) * np.exp(-rate * step_s) + fall
        speed_next = _speed(velocity_next)
        position = position + (0.5 * step_s) * (velocity + velocity_next)
        path = path + (0.5 * step_s) * (speed + speed_next)
        velocity, speed, against = velocity_next, speed_next, _speed(velocity_next - wind)
        if not isothermal:
            settle_k, keep, burning = _heat_step(
                middle_k, middle_burnt, reynolds, film_k, density, conductivity, diameter, mass_per_area,
                steel=steel, step_s=step_s, oxygen=oxygen, air_k=air_k,
            )  # fmt: skip
            burning = np.minimum(burning, np.maximum(steel.oxidisable_share - burnt, 0.0))
            burnt = burnt + burning
            kelvin_next = np.clip(settle_k + (kelvin - settle_k) * keep, LEAST_K, MOST_K)
            warmed = kelvin_next - kelvin
            kelvin = kelvin_next
        kept.append((position, velocity, kelvin, burnt, path))
        if until_dark and step % 8 == 7 and (count == 0 or float(kelvin.max()) < heat.GLOW_LEAST_K):
            break
    return Paths(
        step_s=step_s,
        position_m=np.stack([k[0] for k in kept]).transpose(2, 0, 1),
        velocity_m_s=np.stack([k[1] for k in kept]).transpose(2, 0, 1),
        temperature_k=np.stack([k[2] for k in kept]).T,
        oxidised=np.stack([k[3] for k in kept]).T,
        path_m=np.stack([k[4] for k in kept]).T,
    )


def _speed(velocity: Array) -> Array:
    return np.asarray(np.sqrt((velocity * velocity).sum(axis=0)))


def _heat_step(
    kelvin: Array,
    burnt: Array,
    reynolds: Array,
    film_k: Array,
    density: Array,
    conductivity: Array,
    diameter: Array,
    mass_per_area: Array,
    *,
    steel: Steel,
    step_s: float,
    oxygen: float,
    air_k: float,
) -> tuple[Array, Array, Array]:
    """Temperature that a particle tends to, share of the distance to it that a step leaves, share burnt in a step."""
    nusselt = heat.ranz_marshall(reynolds)
    transfer = nusselt * conductivity / diameter
    square = kelvin * kelvin
    gained = (-heat.EMISSIVITY * heat.STEFAN_BOLTZMANN_W_M2_K4) * (square * square - air_k**4)
    burning = np.zeros_like(kelvin)
    if steel.oxidisable_share > 0.0 and oxygen > 0.0 and steel.affinity > 0.0:
        flux = heat.oxygen_flux_kg_m2_s(kelvin, film_k, density, nusselt, diameter, oxygen=oxygen)
        # the shell closes late and fast as the burnable share is used up: open share 1 - (burnt / burnable)^4
        closed = burnt * (1.0 / steel.oxidisable_share)
        closed *= closed
        flux *= steel.affinity * np.maximum(1.0 - closed * closed, 0.0)
        gained += flux * heat.HEAT_PER_KG_OXYGEN_J
        burning = flux * (step_s * heat.IRON_PER_OXYGEN) / mass_per_area
    loss_rate = transfer / (mass_per_area * heat.IRON_HEAT_J_KG_K)
    return air_k + gained / transfer, np.exp(-loss_rate * step_s), burning
