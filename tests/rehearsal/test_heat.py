"""Glow: the table against the integral, and its range."""

from __future__ import annotations

import numpy as np
import pytest

from edgewatch.rehearsal import heat


def test_the_glow_table_follows_the_integral() -> None:
    """Between its nodes the table is within a thousandth of the integral of Planck's law over the band, in photons."""
    band = heat.Band()
    nm = np.linspace(band.low_nm, band.high_nm, 4001)
    kelvin = np.array([1002.5, 1337.7, 1798.1, 1801.9, 2222.2, 2997.3])
    light = (heat.planck_exitance_w_m3(nm[None, :] * 1e-9, kelvin[:, None]) * band.response(nm) * nm).sum(axis=1)
    reference = (heat.planck_exitance_w_m3(nm * 1e-9, np.array(1800.0)) * band.response(nm) * nm).sum()
    assert heat.log_glow(kelvin, band) == pytest.approx(np.log(light / reference), abs=1e-3)


def test_glow_rises_with_temperature_and_ends_at_the_table() -> None:
    """Monotone; beyond the table the ends hold, with nothing infinite."""
    kelvin = np.linspace(100.0, 5000.0, 500)
    glow = heat.log_glow(kelvin, heat.Band())
    assert np.isfinite(glow).all()
    assert (np.diff(glow) >= 0.0).all()
    assert heat.log_glow(np.array([1800.0]), heat.Band())[0] == pytest.approx(0.0, abs=1e-12)


def test_red_heat_is_dull_in_every_band() -> None:
    """At 1000 K the camera gets less than a hundredth of what it gets at 1800 K, in silicon's and in narrower bands."""
    for band in (heat.Band(), heat.Band(low_nm=500.0, peak_nm=600.0, high_nm=700.0)):
        assert heat.log_glow(np.array([1000.0]), band)[0] < np.log(0.01)


@pytest.mark.parametrize(
    ("low", "peak", "high"),
    [(700.0, 600.0, 1000.0), (400.0, 1100.0, 1000.0), (0.0, 600.0, 1000.0), (400.0, 600.0, 1e6)],
)
def test_bands_out_of_order_are_refused(low: float, peak: float, high: float) -> None:
    """Wavelengths must rise and be light."""
    with pytest.raises(ValueError, match="low_nm"):
        heat.Band(low_nm=low, peak_nm=peak, high_nm=high)


def test_oxygen_uptake_is_below_both_limits() -> None:
    """Diffusion and reaction in series: slower than either alone, and none without oxygen."""
    kelvin = np.array([1100.0, 1500.0, 2000.0])
    film = 0.5 * (kelvin + heat.AIR_K)
    density, _, _ = heat.film_properties(film)
    args = (kelvin, film, density, np.full(3, 4.0), np.full(3, 1e-4))
    flux = heat.oxygen_flux_kg_m2_s(*args, oxygen=0.232)
    outside = 4.0 * heat.OXYGEN_DIFFUSIVITY_M2_S * (film / heat.AIR_K) ** 1.75 / 1e-4 * density * np.log1p(0.232)
    assert (flux > 0.0).all()
    assert (flux < outside).all()
    assert flux[2] > 0.9 * outside[2], "hot surfaces burn all the oxygen that reaches them"
    assert (heat.oxygen_flux_kg_m2_s(*args, oxygen=0.0) == 0.0).all()
