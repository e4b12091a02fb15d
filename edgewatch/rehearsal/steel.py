"""What the bar is made of, as far as its sparks go: an invented but plausible table.

The burst hazards are round numbers chosen for a rehearsal (0.1, 0.9 and 2.2 bursts per metre for low, medium and high
carbon); the order of the metals by reach and by bursts follows the classical workshop table.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np


@dataclass(frozen=True, slots=True, kw_only=True)
class Steel:
    """How one metal sparks. Raises ``ValueError`` naming the field that is out of range.

    ``hazard_per_m``: bursts per metre of flight while the particle is hot enough to burst. ``fork_share``: share of
    bursts that are forks (three forward prongs); the others are stars of ``arms_low`` to ``arms_high`` arms.
    ``goes_on_share``: probability that something of the particle flies on after a star. ``arm_speed_m_s``,
    ``arm_life_ms``: typical speed at which fragments leave and time they glow. ``radius_um``, ``radius_spread``:
    median radius of the particles and deviation of its logarithm. ``launch_k``: mean temperature at launch.
    ``oxidisable_share``: share of the particle's iron that burns before the oxide shell closes; 0: it does not burn.
    ``affinity``: how readily the surface takes oxygen, 1 for plain carbon steel. ``stream``: relative number of sparks.
    """

    name: str
    hazard_per_m: float
    fork_share: float = 0.3
    arms_low: int = 3
    arms_high: int = 7
    goes_on_share: float = 0.25
    arm_speed_m_s: float = 20.0
    arm_life_ms: float = 1.4
    radius_um: float = 45.0
    radius_spread: float = 0.16
    launch_k: float = 1400.0
    oxidisable_share: float = 0.20
    affinity: float = 1.0
    stream: float = 1.0

    def __post_init__(self) -> None:
        """Check ranges once."""
        for name, low, high in (
            ("hazard_per_m", 0.0, 50.0),
            ("fork_share", 0.0, 1.0),
            ("arms_low", 3, 12),
            ("arms_high", 3, 12),
            ("goes_on_share", 0.0, 1.0),
            ("arm_speed_m_s", 0.1, 200.0),
            ("arm_life_ms", 0.05, 20.0),
            ("radius_um", 1.0, 1000.0),
            ("radius_spread", 0.0, 1.0),
            ("launch_k", 250.0, 3000.0),
            ("oxidisable_share", 0.0, 1.0),
            ("affinity", 0.0, 100.0),
            ("stream", 0.0, 10.0),
        ):
            value = getattr(self, name)
            if not (math.isfinite(value) and low <= value <= high):
                raise ValueError(f"{name} = {value!r}: allowed is {low:g} to {high:g}")
        if self.arms_high < self.arms_low:
            raise ValueError(f"arms_high = {self.arms_high}: at least arms_low = {self.arms_low}")

    def varied(self, rng: np.random.Generator) -> Steel:
        """Return a steel whose sparks look otherwise at the same hazard: arms, brightness along the streak, sizes."""
        low = int(rng.integers(3, 5))
        return replace(
            self,
            arms_low=low,
            arms_high=low + int(rng.integers(0, 5)),
            fork_share=float(np.clip(self.fork_share + rng.uniform(-0.3, 0.3), 0.0, 1.0)),
            goes_on_share=float(np.clip(self.goes_on_share + rng.uniform(-0.2, 0.2), 0.0, 0.8)),
            arm_speed_m_s=self.arm_speed_m_s * float(np.exp(rng.normal(0.0, 0.25))),
            arm_life_ms=self.arm_life_ms * float(np.exp(rng.normal(0.0, 0.2))),
            radius_um=self.radius_um * float(np.exp(rng.normal(0.0, 0.08))),
            launch_k=self.launch_k + float(rng.normal(0.0, 60.0)),
            oxidisable_share=self.oxidisable_share * float(np.exp(rng.normal(0.0, 0.08))),
        )


STEELS: dict[str, Steel] = {
    steel.name: steel
    for steel in (
        Steel(name="C15", hazard_per_m=0.1, fork_share=0.6, arms_high=5, goes_on_share=0.15),
        Steel(name="C25", hazard_per_m=0.35, fork_share=0.5, arms_high=6, goes_on_share=0.2),
        Steel(name="C35", hazard_per_m=0.6, fork_share=0.4, arms_high=6, goes_on_share=0.2),
        Steel(name="C45", hazard_per_m=0.9, fork_share=0.3, arms_high=7, goes_on_share=0.25),
        Steel(name="C60", hazard_per_m=1.5, fork_share=0.2, arms_high=8, goes_on_share=0.3),
        Steel(name="C80", hazard_per_m=2.2, fork_share=0.15, arms_high=8, goes_on_share=0.4),
        Steel(name="C100", hazard_per_m=3.0, fork_share=0.1, arms_high=8, goes_on_share=0.45),
        Steel(name="42CrMo4", hazard_per_m=0.45, fork_share=0.6, arms_high=5, oxidisable_share=0.17, stream=0.8),
    )
}
"""Grades by name, invented for rehearsals."""

WORKSHOP: dict[str, Steel] = {
    steel.name: steel
    for steel in (
        Steel(name="wrought iron", hazard_per_m=0.06, fork_share=1.0, radius_um=44.5),
        Steel(name="machine steel", hazard_per_m=0.2, fork_share=0.9, radius_um=47.0),
        Steel(name="carbon tool steel", hazard_per_m=3.5, fork_share=0.1, goes_on_share=0.5),
        Steel(name="grey cast iron", hazard_per_m=1.6, radius_um=27.0, goes_on_share=0.5, stream=0.4),
        Steel(name="white cast iron", hazard_per_m=0.25, radius_um=23.0, goes_on_share=0.5, stream=0.2),
        Steel(name="malleable iron", hazard_per_m=1.6, radius_um=31.0, goes_on_share=0.5, stream=0.7),
        Steel(
            name="high-speed steel",
            hazard_per_m=0.02,
            fork_share=1.0,
            oxidisable_share=0.17,
            radius_um=46.0,
            stream=0.4,
        ),
        Steel(name="manganese steel", hazard_per_m=1.6, oxidisable_share=0.18, radius_um=40.0, stream=0.9),
        Steel(
            name="stainless 410", hazard_per_m=0.6, fork_share=0.9, oxidisable_share=0.16, radius_um=43.5, stream=0.7
        ),
        Steel(name="die steel", hazard_per_m=1.6, oxidisable_share=0.16, radius_um=36.0, stream=0.4),
        Steel(name="nitriding steel", hazard_per_m=0.6, fork_share=0.9, oxidisable_share=0.18, radius_um=43.5),
        Steel(name="copper", hazard_per_m=0.0, oxidisable_share=0.0, launch_k=700.0),
        Steel(name="aluminium", hazard_per_m=0.0, oxidisable_share=0.0, launch_k=650.0),
    )
}
"""Metals of the classical workshop table, as far as the model covers them (iron and steel, and two that do not spark).
Bursts and stream follow the table's words; particle sizes (brittle irons crumble) and burnable shares (chromium and
tungsten close the shell early) are set so that the flight gives the table's order of lengths. Copper and aluminium
soften and conduct: their chips leave below red heat and their oxide stops the burning at once."""


def find_steel(name: str) -> Steel:
    """Return the steel called ``name``; ``ValueError`` says which there are."""
    try:
        return STEELS[name]
    except KeyError:
        raise ValueError(f"steel {name!r}: known are {', '.join(STEELS)}") from None
