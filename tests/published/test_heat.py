"""Heat against correlations, tables of properties, formation heats, Planck's law and common practice."""

from __future__ import annotations

import chemicals
import ht
import numpy as np
import pytest
from ht.radiation import blackbody_spectral_radiance
from scipy import constants

from edgewatch.rehearsal import flight, heat
from edgewatch.rehearsal.steel import WORKSHOP, Steel, find_steel


def test_ranz_marshall() -> None:
    """Chem. Eng. Prog. 48 (1952): Nu = 2 + 0.6 Re^1/2 Pr^1/3, worked out by hand."""
    for reynolds, prandtl, nusselt in (
        (1.0, 0.7, 2.532742),
        (10.0, 0.7, 3.684679),
        (100.0, 0.7, 7.327424),
        (1000.0, 0.707, 18.902764),
    ):
        assert float(heat.ranz_marshall(np.array(reynolds), prandtl)) == pytest.approx(nusselt, rel=1e-6)


def test_convection_lies_near_another_correlation() -> None:
    """Gnielinski's sphere (VDI heat atlas) as ``ht`` has it for a bed so thin that it is one sphere: within 12 percent.

    The two were fitted to different measurements; that far apart are good correlations for spheres.
    """
    for reynolds in (3.0, 10.0, 30.0, 100.0):
        sphere = ht.Nu_packed_bed_Gnielinski(
            dp=1e-3, voidage=1.0, vs=reynolds * 1e-3, rho=1.0, mu=1e-6, Pr=0.71, fa=1.0
        )
        assert float(heat.ranz_marshall(np.array(reynolds))) == pytest.approx(sphere, rel=0.12)


def test_still_air_is_pure_conduction() -> None:
    """Without flow a sphere's Nusselt number is 2; Churchill's free convection in ``ht`` tends to it as well."""
    assert float(heat.ranz_marshall(np.array(0.0))) == 2.0
    assert ht.Nu_sphere_Churchill(0.71, 1e-9) == pytest.approx(2.0, rel=0.02)


def test_air_is_the_air_of_the_tables() -> None:
    """Lemmon et al. (2000, 2004) at 101 325 Pa, through ``chemicals``: within two percent from 300 to 1500 K."""
    for kelvin, density, viscosity, conductivity in (
        (300.0, 1.176996, 1.853734e-5, 0.026384),
        (500.0, 0.705743, 2.709014e-5, 0.039945),
        (1000.0, 0.352877, 4.327984e-5, 0.067677),
        (1500.0, 0.235271, 5.632547e-5, 0.091782),
    ):
        ours = heat.film_properties(np.array(kelvin))
        for value, want in zip(ours, (density, viscosity, conductivity), strict=True):
            assert float(value) == pytest.approx(want, rel=0.02 if kelvin != 500.0 else 0.03)


def test_heat_of_burning_iron() -> None:
    """FeO: -272.04 kJ/mol (JANAF, as the NIST WebBook carries it; from memory), -272.0 in ``chemicals`` (CRC Handbook);
    4.87 MJ per kg of iron. Magnetite and hematite (-825.5 kJ/mol, read in the NIST WebBook) give as much per kg of
    oxygen within five percent, so the choice of oxide does not matter when oxygen is short.
    """
    per_oxygen = heat.HEAT_PER_KG_OXYGEN_J
    assert per_oxygen == pytest.approx(-chemicals.Hfs("1345-25-1") / 0.0159994, rel=1e-3)
    assert per_oxygen / heat.IRON_PER_OXYGEN == pytest.approx(4.8713e6, rel=1e-3)
    assert -chemicals.Hfs("1317-61-9") / (4 * 0.0159994) == pytest.approx(per_oxygen, rel=0.05)
    hematite = 825.50e3 / (3 * 0.0159994)
    assert hematite == pytest.approx(per_oxygen, rel=0.05)
    assert -chemicals.Hfs("1309-37-1") == pytest.approx(825.50e3, rel=2e-3)


def test_plancks_law() -> None:
    """Against ``ht``'s radiance at 650 nm (times pi), and the published values there; constants are CODATA 2022's."""
    assert pytest.approx(constants.h * constants.c / constants.k, rel=1e-12) == heat.PLANCK_C2_M_K
    assert pytest.approx(2 * np.pi * constants.h * constants.c**2, rel=1e-12) == heat.PLANCK_C1_W_M2
    assert pytest.approx(constants.Stefan_Boltzmann, rel=1e-9) == heat.STEFAN_BOLTZMANN_W_M2_K4
    for kelvin, radiance in ((1000.0, 2.501726e5), (1500.0, 4.005102e8), (2000.0, 1.602533e10), (2500.0, 1.466136e11)):
        ours = float(heat.planck_exitance_w_m3(np.array(650e-9), np.array(kelvin))) / np.pi
        assert ours == pytest.approx(radiance, rel=1e-6)
        assert ours == pytest.approx(blackbody_spectral_radiance(kelvin, 650e-9), rel=1e-6)


def test_planck_peaks_where_wien_says_and_sums_to_stefan() -> None:
    """2.8977719552e-3 m K (CODATA 2022); the integral over all wavelengths is sigma T^4."""
    micrometres = np.linspace(0.05, 400.0, 400_000)
    exitance = heat.planck_exitance_w_m3(micrometres * 1e-6, np.array(1800.0))
    assert micrometres[exitance.argmax()] * 1e-6 * 1800.0 == pytest.approx(2.8977719552e-3, rel=1e-3)
    total = float(((exitance[1:] + exitance[:-1]) * np.diff(micrometres * 1e-6)).sum() / 2.0)
    assert total == pytest.approx(heat.STEFAN_BOLTZMANN_W_M2_K4 * 1800.0**4, rel=1e-4)


def spark(radius_um: float, temperature_k: float, *, steel: Steel | None = None, **options: float) -> flight.Paths:
    """One particle launched at 26 m/s."""
    launch = flight.Launch(
        radius_m=np.array([radius_um * 1e-6]),
        position_m=np.zeros((1, 3)),
        velocity_m_s=np.array([[26.0, 0.0, 0.0]]),
        temperature_k=np.array([temperature_k]),
        oxidised=np.zeros(1),
    )
    return flight.fly(launch, steel or find_steel("C45"), duration_s=0.3, until_dark=False, **options)


def test_iron_ignites_near_1080_k() -> None:
    """Mi, Fujinawa and Bergthorson (arXiv:2110.15461): about 1080 K, nearly whatever the size.

    In the draught of a flight it takes a little more for the small: from 1200 K all burn, from 950 K none.
    """
    for radius in (25.0, 50.0, 100.0):
        assert spark(radius, 1200.0).temperature_k.max() > 1500.0
        assert spark(radius, 950.0).temperature_k.max() == 950.0


def test_no_sparks_without_oxygen() -> None:
    """Dhami, Panda and Viswanathan (arXiv:2204.00224): the heating is oxidation in flight."""
    with_air = spark(50.0, 1300.0)
    without = spark(50.0, 1300.0, oxygen=0.0)
    assert with_air.temperature_k.max() > 1700.0
    assert (np.diff(without.temperature_k) < 0).all()


def test_copper_and_aluminium_do_not_glow() -> None:
    """Workshop knowledge: copper, brass and aluminium throw no sparks."""
    for name in ("copper", "aluminium"):
        steel = WORKSHOP[name]
        assert spark(50.0, steel.launch_k, steel=steel).temperature_k.max() < heat.GLOW_LEAST_K


# -- common practice: orders of magnitude without a source, within a factor of two and a half --------------------------


def within(value: float, usual: float, factor: float = 2.5) -> bool:
    """Whether a value has the order of magnitude."""
    return usual / factor < value < usual * factor


def test_heat_transfer_is_about_2000_w_m2_k() -> None:
    """Common practice, no source: h about 2000 W/(m2 K); radius 50 micrometre at 20 m/s and 1700 K; cooling time
    (density, heat capacity, a third of the radius, over h) about 50 ms.
    """
    density, viscosity, conductivity = (float(v) for v in heat.film_properties(np.array(1000.0)))
    transfer = float(heat.ranz_marshall(np.array(density * 20.0 * 1e-4 / viscosity))) * conductivity / 1e-4
    assert within(transfer, 2000.0)
    assert within(heat.IRON_DENSITY_KG_M3 * heat.IRON_HEAT_J_KG_K * 50e-6 / 3.0 / transfer, 0.050)


def test_burning_takes_about_8_ms() -> None:
    """Common practice, no source: oxidation (diffusion) time about 8 ms; here from launch to the hottest moment."""
    paths = spark(50.0, 1400.0)
    assert within(float(paths.temperature_k[0].argmax()) * paths.step_s, 0.008)


def test_glow_lasts_up_to_about_a_fifth_of_a_second() -> None:
    """Common practice, no source: down to about 1000 K, up to about 0.2 s; the largest particles of a stream."""
    paths = spark(110.0, 1400.0)
    assert within(float((paths.temperature_k[0] > heat.GLOW_LEAST_K).sum()) * paths.step_s, 0.2)
