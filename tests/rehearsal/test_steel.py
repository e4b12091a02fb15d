"""Steels: found by name, varied within reason, refused by field."""

from __future__ import annotations

import numpy as np
import pytest

from edgewatch.rehearsal.steel import STEELS, WORKSHOP, Steel, find_steel
from edgewatch.settings import GRADE_NAME


def test_names_are_grade_names_and_hazard_rises_with_carbon() -> None:
    """Each grade can be expected by a station; plain carbon grades are ordered by hazard."""
    assert all(GRADE_NAME.fullmatch(name) for name in STEELS)
    carbon = [STEELS[f"C{content}"].hazard_per_m for content in (15, 25, 35, 45, 60, 80, 100)]
    assert carbon == sorted(carbon)
    assert not set(STEELS) & set(WORKSHOP)


def test_an_unknown_steel_is_refused_with_what_there_is() -> None:
    """The message names the known ones."""
    with pytest.raises(ValueError, match="C45"):
        find_steel("unobtainium")


def test_a_varied_steel_bursts_as_often_and_looks_otherwise() -> None:
    """The hazard is untouched, arms and sizes are not."""
    rng = np.random.default_rng(1)
    steels = [find_steel("C45").varied(rng) for _ in range(30)]
    assert {steel.hazard_per_m for steel in steels} == {find_steel("C45").hazard_per_m}
    assert len({steel.arms_high for steel in steels}) > 2
    assert len({steel.radius_um for steel in steels}) == 30


@pytest.mark.parametrize(
    ("field", "value"),
    [
        ("hazard_per_m", -0.1),
        ("radius_um", 0.0),
        ("radius_um", float("nan")),
        ("launch_k", 100.0),
        ("arms_low", 2),
        ("fork_share", 1.5),
        ("oxidisable_share", -1.0),
        ("arm_life_ms", 0.0),
    ],
)
def test_impossible_steels_are_refused_by_field(field: str, value: float) -> None:
    """Every value out of range names itself."""
    with pytest.raises(ValueError, match=field):
        Steel(**{"name": "x", "hazard_per_m": 1.0, field: value})


def test_fewer_arms_at_most_than_at_least_is_refused() -> None:
    """Limits in the wrong order."""
    with pytest.raises(ValueError, match="arms_high"):
        Steel(name="x", hazard_per_m=1.0, arms_low=6, arms_high=4)
