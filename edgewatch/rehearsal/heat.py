"""Heat of one particle: convection, radiation, oxidation, and the light that a camera gets of it.

Film properties of air follow power laws through the reference values of Lemmon et al. (2000, 2004) at 300 and 1500 K.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache
from typing import Any

import numpy as np
from numpy.typing import NDArray

Array = NDArray[Any]

STEFAN_BOLTZMANN_W_M2_K4 = 5.6703744191844314e-8
PLANCK_C1_W_M2 = 3.7417718521927573e-16
"""First radiation constant 2 pi h c2 (CODATA 2022)."""
PLANCK_C2_M_K = 1.4387768775039337e-2
"""Second radiation constant (CODATA 2022)."""

AIR_K = 300.0
AIR_DENSITY_KG_M3 = 1.176996
AIR_VISCOSITY_PA_S = 1.853734e-5
AIR_CONDUCTIVITY_W_M_K = 0.026384
"""Air at 300 K and 101 325 Pa (Lemmon et al.)."""
_VISCOSITY_POWER = 0.6948
_CONDUCTIVITY_POWER = 0.7768
"""Through the values at 300 K and around 1000 to 1500 K; within 2 % from 300 to 1500 K (held by a test)."""
AIR_PRANDTL = 0.71

OXYGEN_MASS_SHARE = 0.232
OXYGEN_DIFFUSIVITY_M2_S = 2.1e-5
"""Oxygen in air at 300 K; it rises with the 1.75th power of temperature (Fuller's rule)."""
HEAT_PER_KG_OXYGEN_J = 272.04e3 / 0.0159994
"""Fe + 1/2 O2 -> FeO, 272.04 kJ/mol (JANAF)."""
IRON_PER_OXYGEN = 55.845 / 15.9994
"""Mass of iron that one unit mass of oxygen burns to FeO."""

IRON_DENSITY_KG_M3 = 7000.0
"""Near melting."""
IRON_HEAT_J_KG_K = 700.0
"""Mean over 1000 to 2000 K, latent heat spread over it."""
EMISSIVITY = 0.75
"""Oxidised iron."""

SURFACE_RATE_M_S = 2.3
SURFACE_AT_K = 1080.0
SURFACE_ACTIVATION_K = 14_400.0
"""Surface reaction: rate at SURFACE_AT_K and activation temperature, set so that particles ignite near 1080 K as
measured by Mi, Fujinawa and Bergthorson (2021)."""

GLOW_LEAST_K = 1000.0
"""Dullest red: below this nothing is visible to a camera (common practice, no source)."""


def film_properties(film_k: Array) -> tuple[Array, Array, Array]:
    """Density (kg/m3), viscosity (Pa s) and conductivity (W/m/K) of air at ``film_k`` (K), 101 325 Pa."""
    ratio = film_k * (1.0 / AIR_K)
    log = np.log(ratio)
    return (
        AIR_DENSITY_KG_M3 / ratio,
        AIR_VISCOSITY_PA_S * np.exp(_VISCOSITY_POWER * log),
        AIR_CONDUCTIVITY_W_M_K * np.exp(_CONDUCTIVITY_POWER * log),
    )


def ranz_marshall(reynolds: Array, prandtl: float = AIR_PRANDTL) -> Array:
    """Nusselt (or, with the Schmidt number, Sherwood) number of a sphere: 2 + 0.6 Re^1/2 Pr^1/3 (1952)."""
    return np.asarray(2.0 + 0.6 * np.sqrt(reynolds) * prandtl ** (1.0 / 3.0))


def planck_exitance_w_m3(wavelength_m: Array, temperature_k: Array) -> Array:
    """Spectral exitance of a black body (W per m2 and m of wavelength)."""
    return np.asarray(PLANCK_C1_W_M2 / wavelength_m**5 / np.expm1(PLANCK_C2_M_K / (wavelength_m * temperature_k)))


@dataclass(frozen=True, slots=True, kw_only=True)
class Band:
    """Wavelengths that the camera sees (nm): a smooth hump between two ends, like a silicon sensor behind glass."""

    low_nm: float = 400.0
    high_nm: float = 1000.0
    peak_nm: float = 600.0

    def __post_init__(self) -> None:
        """Check ranges once."""
        if not 100.0 <= self.low_nm < self.peak_nm < self.high_nm <= 20_000.0:
            raise ValueError(
                f"low_nm, peak_nm, high_nm = {self.low_nm!r}, {self.peak_nm!r}, {self.high_nm!r}: "
                "allowed are rising values from 100 to 20000"
            )

    def response(self, wavelength_nm: Array) -> Array:
        """Relative response, 0 to 1."""
        up = (wavelength_nm - self.low_nm) / (self.peak_nm - self.low_nm)
        down = (self.high_nm - wavelength_nm) / (self.high_nm - self.peak_nm)
        return np.clip(np.minimum(up, down), 0.0, 1.0)


TABLE_LOW_K, TABLE_HIGH_K, TABLE_STEP_K = 600.0, 3600.0, 5.0
GLOW_REFERENCE_K = 1800.0


@lru_cache(maxsize=16)
def _log_glow_table(band: Band) -> NDArray[np.float64]:
    kelvin = np.arange(TABLE_LOW_K, TABLE_HIGH_K + TABLE_STEP_K / 2, TABLE_STEP_K)
    nm = np.linspace(band.low_nm, band.high_nm, 241)
    # photons, not watts, make electrons: weight by the wavelength
    weight = band.response(nm) * nm
    light = planck_exitance_w_m3(nm[None, :] * 1e-9, kelvin[:, None]) @ weight
    reference = planck_exitance_w_m3(nm * 1e-9, np.array(GLOW_REFERENCE_K)) @ weight
    return np.asarray(np.log(light / reference))


def log_glow(temperature_k: Array, band: Band) -> Array:
    """Logarithm of the photons that ``band`` gets from a black surface, relative to one at 1800 K. Any shape.

    Interpolated in a table of 5 K steps (error below 1e-3). Temperatures outside 600 to 3600 K take the table's ends.
    """
    table = _log_glow_table(band)
    position = np.clip((temperature_k - TABLE_LOW_K) / TABLE_STEP_K, 0.0, len(table) - 1.001)
    index = position.astype(np.int32)
    part = position - index
    low = table[index]
    return np.asarray(low + (table[index + 1] - low) * part)


def oxygen_flux_kg_m2_s(
    temperature_k: Array, film_k: Array, density_kg_m3: Array, sherwood: Array, diameter_m: Array, *, oxygen: float
) -> Array:
    """Oxygen taken up by a bare surface: diffusion through the air and surface reaction in series.

    ``oxygen``: mass share in the surrounding gas. The diffusion limit is Sh D rho / d ln(1 + Y) (Stefan flow).
    """
    ratio = film_k * (1.0 / AIR_K)
    root = np.sqrt(ratio)
    diffusivity = OXYGEN_DIFFUSIVITY_M2_S * ratio * root * np.sqrt(root)  # the power 1.75
    outside = sherwood * diffusivity / diameter_m
    reaction = SURFACE_RATE_M_S * np.exp(SURFACE_ACTIVATION_K * (1.0 / SURFACE_AT_K - 1.0 / temperature_k))
    return np.asarray(density_kg_m3 * math.log1p(oxygen) * outside * reaction / (outside + reaction))
