"""Flight: order of the method, gravity, wind, what does not burn, and refusals."""

from __future__ import annotations

import numpy as np
import pytest

from edgewatch.rehearsal import flight, heat
from edgewatch.rehearsal.steel import Steel, find_steel


def launch(
    radius_um: list[float],
    speed_m_s: float = 26.0,
    temperature_k: float = 1400.0,
    direction: tuple[float, ...] = (1, 0, 0),
) -> flight.Launch:
    """Particles of these radii, all at one speed and temperature."""
    count = len(radius_um)
    return flight.Launch(
        radius_m=1e-6 * np.array(radius_um),
        position_m=np.zeros((count, 3)),
        velocity_m_s=np.tile(speed_m_s * np.array(direction, dtype=float), (count, 1)),
        temperature_k=np.full(count, temperature_k),
        oxidised=np.zeros(count),
    )


def fly(start: flight.Launch, steel: Steel | None = None, **options: object) -> flight.Paths:
    """Fly with the options given."""
    return flight.fly(start, steel or find_steel("C45"), **options)  # type: ignore[arg-type]


def test_halving_the_step_quarters_the_error() -> None:
    """Second order in the step, temperature and way, against a step forty times smaller."""
    start = launch([30, 45, 60, 100])
    fine = fly(start, step_s=2.5e-5, duration_s=0.03, until_dark=False)
    errors = []
    for step_s in (1e-3, 5e-4):
        every = round(step_s / 2.5e-5)
        rough = fly(start, step_s=step_s, duration_s=0.03, until_dark=False)
        errors.append(
            (
                np.abs(rough.temperature_k - fine.temperature_k[:, ::every]).max(),
                np.abs(rough.path_m - fine.path_m[:, ::every]).max(),
            )
        )
    (hot, far), (hot_half, far_half) = errors
    assert 3.2 < hot / hot_half < 5.0
    assert 3.2 < far / far_half < 5.0


def test_the_usual_step_is_exact_enough() -> None:
    """At the step in use a typical particle is right to 5 K and 0.05 mm over its whole life."""
    start = launch([45.0])
    fine = fly(start, step_s=1e-5, duration_s=0.04, until_dark=False)
    usual = fly(start, duration_s=0.04, until_dark=False)
    every = round(flight.STEP_S / 1e-5)
    assert np.abs(usual.temperature_k - fine.temperature_k[:, ::every]).max() < 5.0
    assert np.abs(usual.path_m - fine.path_m[:, ::every]).max() < 5e-5


def test_a_heavy_ball_falls_as_galileo_has_it() -> None:
    """A centimetre of steel, launched level, falls g t2 / 2 and keeps its speed to a percent."""
    paths = fly(launch([10_000.0], temperature_k=300.0), duration_s=0.1, until_dark=False)
    assert paths.position_m[0, -1, 1] == pytest.approx(0.5 * flight.GRAVITY_M_S2 * 0.1**2, rel=0.01)
    assert paths.velocity_m_s[0, -1, 0] == pytest.approx(26.0, rel=0.01)


def test_particles_do_not_see_each_other() -> None:
    """A batch flies as its members fly alone."""
    together = fly(launch([30, 60]), duration_s=0.02, until_dark=False)
    for row, radius in enumerate([30.0, 60.0]):
        alone = fly(launch([radius]), duration_s=0.02, until_dark=False)
        assert together.position_m[row] == pytest.approx(alone.position_m[0], abs=1e-12)
        assert together.temperature_k[row] == pytest.approx(alone.temperature_k[0], abs=1e-9)


def test_a_following_wind_carries_further_and_still_air_is_the_limit() -> None:
    """In air that moves along as fast as the particle nothing slows it."""
    still = fly(launch([45.0]), duration_s=0.02, until_dark=False)
    light = fly(launch([45.0]), duration_s=0.02, until_dark=False, wind_m_s=(3.0, 0.0, 0.0))
    along = fly(launch([45.0]), duration_s=0.02, until_dark=False, wind_m_s=(26.0, 0.0, 0.0))
    assert still.path_m[0, -1] < light.path_m[0, -1] < along.path_m[0, -1]
    assert along.position_m[0, -1, 0] == pytest.approx(26.0 * 0.02, rel=1e-3)


def test_without_oxygen_nothing_heats() -> None:
    """In nitrogen every particle only cools, and is dark within its cooling time."""
    paths = fly(launch([20, 45, 100]), oxygen=0.0, duration_s=0.1, until_dark=False)
    assert (np.diff(paths.temperature_k, axis=1) < 0.0).all()
    assert (paths.oxidised == 0.0).all()
    assert (paths.temperature_k[:, -1] < heat.GLOW_LEAST_K).all()


def test_with_more_oxygen_it_burns_hotter() -> None:
    """Peak temperature rises with the oxygen share."""
    peaks = [
        float(fly(launch([45.0]), oxygen=share, duration_s=0.05).temperature_k.max())
        for share in (0.0, 0.1, 0.232, 0.4)
    ]
    assert peaks == sorted(peaks)
    assert peaks[0] == 1400.0
    assert 1700.0 < peaks[2] < 2300.0


def test_never_more_burns_than_is_there() -> None:
    """The burnt share grows and stays below the burnable share, even where all burns within a step."""
    paths = fly(launch([1.5, 5, 20, 45]), duration_s=0.05, until_dark=False)
    assert (np.diff(paths.oxidised, axis=1) >= 0.0).all()
    assert paths.oxidised.max() <= find_steel("C45").oxidisable_share + 1e-12


def test_an_empty_batch_flies() -> None:
    """No particles are a normal batch."""
    paths = fly(launch([]))
    assert paths.position_m.shape[0] == 0
    assert paths.temperature_k.shape[0] == 0


@pytest.mark.parametrize(
    ("field", "value"),
    [
        ("radius_m", 0.0),
        ("radius_m", np.nan),
        ("velocity_m_s", 1e4),
        ("velocity_m_s", np.inf),
        ("temperature_k", 0.0),
        ("temperature_k", 1e4),
        ("oxidised", 1.5),
        ("position_m", np.nan),
    ],
)
def test_impossible_particles_are_refused_by_name(field: str, value: float) -> None:
    """Sizes, speeds and temperatures out of range: the parameter is named."""
    good = launch([45.0])
    values = {name: getattr(good, name).copy() for name in flight.Launch.__slots__}
    values[field].flat[0] = value
    with pytest.raises(ValueError, match=field):
        flight.Launch(**values)


def test_wrong_shapes_are_refused() -> None:
    """Two velocities for one particle."""
    good = launch([45.0])
    with pytest.raises(ValueError, match="velocity_m_s"):
        flight.Launch(
            radius_m=good.radius_m,
            position_m=good.position_m,
            velocity_m_s=np.zeros((2, 3)),
            temperature_k=good.temperature_k,
            oxidised=good.oxidised,
        )


@pytest.mark.parametrize(
    ("option", "value"),
    [
        ("duration_s", -1.0),
        ("step_s", 0.0),
        ("step_s", 1.0),
        ("oxygen", 1.2),
        ("air_k", 20.0),
        ("air_k", np.nan),
        ("wind_m_s", (np.nan, 0.0, 0.0)),
        ("wind_m_s", (300.0, 0.0, 0.0)),
    ],
)
def test_impossible_surroundings_are_refused_by_name(option: str, value: object) -> None:
    """Time steps, oxygen, air and wind out of range."""
    with pytest.raises(ValueError, match=option):
        fly(launch([45.0]), **{option: value})
