"""The classical workshop table of spark characteristics, as U.S. Army TM 9-237 and older welding handbooks print it.

Known from memory as a whole; grey iron 25 in, the order of bursts of wrought iron, machine steel, carbon tool steel,
malleable iron and high-speed steel were read in an Army course text (armyordnance.tpub.com/Od1643/Od16430039.htm).
Lengths belong to a 12 inch wheel and are relative, so only orders are held. Of the table's fifteen rows the model
covers the iron and steel (1 to 11) and the metals that do not spark (15); hard-facing alloy, carbide and nickel it does
not.
"""

from __future__ import annotations

import numpy as np
import pytest

from edgewatch.rehearsal.outline import Outline, outline
from edgewatch.rehearsal.steel import WORKSHOP

# metal: (length in inches, quantity of spurts)
TABLE = {
    "wrought iron": (65, "very few"),
    "machine steel": (70, "few"),
    "carbon tool steel": (55, "very many"),
    "grey cast iron": (25, "many"),
    "white cast iron": (20, "few"),
    "malleable iron": (30, "many"),
    "high-speed steel": (60, "extremely few"),
    "manganese steel": (45, "many"),
    "stainless 410": (50, "moderate"),
    "die steel": (35, "many"),
    "nitriding steel": (55, "moderate"),
    "copper": (0, "none"),
    "aluminium": (0, "none"),
}
SPURTS = ("none", "extremely few", "very few", "few", "moderate", "many", "very many")


@pytest.fixture(scope="module")
def drawn() -> dict[str, Outline]:
    """Figures of each metal's stream on one wheel, 6000 sparks each."""
    return {
        name: outline(steel, sparks=6000, wheel_speed_m_s=28.0, rng=np.random.default_rng(11))
        for name, steel in WORKSHOP.items()
    }


def test_the_table_is_covered(drawn: dict[str, Outline]) -> None:
    """The simulated metals are those of the table that the model covers."""
    assert set(drawn) == set(TABLE)


def test_metals_rank_by_length_as_in_the_table(drawn: dict[str, Outline]) -> None:
    """Every pair of metals of unlike length has its reach in the table's order."""
    for one, (length, _) in TABLE.items():
        for other, (shorter, _) in TABLE.items():
            if length > shorter > 0:
                assert drawn[one].reach_mm > drawn[other].reach_mm, (one, other)


def test_lengths_are_in_proportion(drawn: dict[str, Outline]) -> None:
    """Beyond the order: reach over length is alike for all metals within a quarter."""
    ratio = np.array([drawn[name].reach_mm / (25.4 * length) for name, (length, _) in TABLE.items() if length])
    assert np.abs(ratio / np.median(ratio) - 1.0).max() < 0.25


def test_metals_rank_by_bursts_as_in_the_table(drawn: dict[str, Outline]) -> None:
    """Every pair of metals of unlike quantity of spurts has its bursts per metre in the table's order."""
    for one, (_, many) in TABLE.items():
        for other, (_, fewer) in TABLE.items():
            if SPURTS.index(many) > SPURTS.index(fewer) > 0:
                assert drawn[one].burst_rate_per_m > drawn[other].burst_rate_per_m, (one, other)


def test_what_throws_no_sparks_throws_none(drawn: dict[str, Outline]) -> None:
    """Copper and aluminium: no track at all."""
    for name, (length, spurts) in TABLE.items():
        if spurts == "none":
            assert length == 0
            assert drawn[name].track_m == 0.0
            assert drawn[name].bursts == 0
