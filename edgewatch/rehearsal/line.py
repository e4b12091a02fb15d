"""A line of bars: which grade is expected, which comes, when each touches the wheel and how it differs from the last.

Bars of one grade are not alike: heats scatter in carbon, contact force in the stream, and the wheel wears. The plan
holds these as arrays; a bar is made when asked for, so a line of a million bars costs little.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from edgewatch.rehearsal.steel import Steel, find_steel
from edgewatch.rehearsal.swarm import Conditions

STRETCH_S = 0.2
"""How long the contact force holds before it changes a little (s)."""
ONSET_S = 0.03
"""Until the bar is fully pressed on, half the sparks fly (s)."""
MOST_BARS = 1_000_000


@dataclass(frozen=True, slots=True, kw_only=True)
class Scatter:
    """How bars of one grade differ, as deviations of the logarithm: ``hazard`` (carbon within the grade's range),
    ``stream`` (force, section), ``radius`` (chip size), ``contact`` (contact time, pauses), ``press`` (force within a
    contact). ``launch_k``: deviation of the launch temperature.
    """

    hazard: float = 0.06
    stream: float = 0.20
    radius: float = 0.02
    contact: float = 0.08
    press: float = 0.12
    launch_k: float = 10.0

    def __post_init__(self) -> None:
        """Check ranges once."""
        for name, high in (("hazard", 1.0), ("stream", 1.0), ("radius", 0.5), ("contact", 0.5), ("press", 1.0)):
            value = getattr(self, name)
            if not (math.isfinite(value) and 0.0 <= value <= high):
                raise ValueError(f"{name} = {value!r}: allowed is 0 to {high:g}")
        if not (math.isfinite(self.launch_k) and 0.0 <= self.launch_k <= 200.0):
            raise ValueError(f"launch_k = {self.launch_k!r}: allowed is 0 to 200")


@dataclass(frozen=True, slots=True, kw_only=True)
class Bar:
    """One bar as it really is. ``number`` counts from 1; times in s of the line's own clock; ``steel``: this bar's own
    values; ``sparks_per_s``, ``wheel_speed_m_s``: of this contact.
    """

    number: int
    begin_s: float
    end_s: float
    expected: str
    grade: str
    steel: Steel
    sparks_per_s: float
    wheel_speed_m_s: float

    @property
    def foreign(self) -> bool:
        """Whether it is another grade than expected."""
        return self.grade != self.expected


class Line:
    """Plan of a line: ``bars`` bars, ``foreign`` of them of ``foreign_grades`` in turn, at places drawn from ``rng``.

    ``wheel_speed_m_s``: surface speed at the first bar, ``worn_speed_m_s`` at the last (the wheel wears evenly in
    between); None: it does not wear. ``sparks_per_s``: typical stream of a plain carbon steel.
    The first bar is never foreign: the line starts well. Raises ``ValueError`` naming what is out of range.
    """

    def __init__(
        self,
        *,
        bars: int,
        foreign: int,
        grade: str,
        foreign_grades: tuple[str, ...],
        rng: np.random.Generator,
        contact_s: float = 1.2,
        pause_s: float = 0.5,
        sparks_per_s: float = 4000.0,
        wheel_speed_m_s: float = 28.0,
        worn_speed_m_s: float | None = None,
        scatter: Scatter | None = None,
    ) -> None:
        if not 1 <= bars <= MOST_BARS:
            raise ValueError(f"bars = {bars!r}: allowed is 1 to {MOST_BARS}")
        if not 0 <= foreign <= bars:
            raise ValueError(f"foreign = {foreign!r}: allowed is 0 to {bars} (bars)")
        if foreign and not foreign_grades:
            raise ValueError("foreign_grades is empty: at least one is needed when foreign is not 0")
        for name, value, low, high in (
            ("contact_s", contact_s, 0.01, 3600.0),
            ("pause_s", pause_s, 0.01, 3600.0),
            ("sparks_per_s", sparks_per_s, 1.0, 1e5),
            ("wheel_speed_m_s", wheel_speed_m_s, 1.0, 200.0),
            ("worn_speed_m_s", wheel_speed_m_s if worn_speed_m_s is None else worn_speed_m_s, 1.0, 200.0),
        ):
            if not (math.isfinite(value) and low <= value <= high):
                raise ValueError(f"{name} = {value!r}: allowed is {low:g} to {high:g}")
        self.grade = grade
        self._steel = find_steel(grade)
        self._foreign_steels = tuple(find_steel(name) for name in foreign_grades)
        self._scatter = spread = scatter or Scatter()
        self._rng = rng
        self._foreign = np.full(bars, -1, dtype=np.int64)
        first = 1 if foreign < bars else 0
        places = np.sort(rng.choice(np.arange(first, bars), size=foreign, replace=False))
        self._foreign[places] = np.arange(foreign) % max(1, len(foreign_grades))
        contact = contact_s * np.exp(spread.contact * rng.normal(size=bars))
        pause = pause_s * np.exp(spread.contact * rng.normal(size=bars))
        self._end_s: NDArray[np.float64] = np.cumsum(contact + pause)
        self._begin_s: NDArray[np.float64] = self._end_s - contact
        self._last_s = float(self._end_s[-1] + pause_s)
        self._hazard = np.exp(spread.hazard * rng.normal(size=bars))
        self._sparks = sparks_per_s * np.exp(spread.stream * rng.normal(size=bars))
        self._radius = np.exp(spread.radius * rng.normal(size=bars))
        self._launch_k = spread.launch_k * rng.normal(size=bars)
        worn = wheel_speed_m_s if worn_speed_m_s is None else worn_speed_m_s
        self._speed = np.linspace(wheel_speed_m_s, worn, bars)

    def __len__(self) -> int:
        return len(self._begin_s)

    @property
    def end_s(self) -> float:
        """End of the last pause (s)."""
        return self._last_s

    def __getitem__(self, index: int) -> Bar:
        """Bar ``index``, counted from 0."""
        place = range(len(self))[index]
        which = int(self._foreign[place])
        steel = self._steel if which < 0 else self._foreign_steels[which]
        own = replace(
            steel,
            hazard_per_m=float(steel.hazard_per_m * self._hazard[place]),
            radius_um=float(steel.radius_um * self._radius[place]),
            launch_k=float(steel.launch_k + self._launch_k[place]),
        )
        return Bar(
            number=place + 1,
            begin_s=float(self._begin_s[place]),
            end_s=float(self._end_s[place]),
            expected=self.grade,
            grade=steel.name,
            steel=own,
            sparks_per_s=float(self._sparks[place]),
            wheel_speed_m_s=float(self._speed[place]),
        )

    def begun(self, t_s: float) -> int:
        """How many bars have touched the wheel by ``t_s``."""
        return int(np.searchsorted(self._begin_s, t_s, side="right"))

    def conditions(self) -> Iterator[Conditions]:
        """What the wheel does, stretch by stretch: onset, then a force that wanders a little."""
        for index in range(len(self)):
            bar = self[index]
            begin, press = bar.begin_s, 0.5
            while begin < bar.end_s - 1e-6:
                end = min(bar.end_s, begin + (ONSET_S if begin == bar.begin_s else STRETCH_S))
                yield Conditions(
                    begin_s=begin,
                    end_s=end,
                    steel=bar.steel,
                    sparks_per_s=bar.sparks_per_s * press,
                    wheel_speed_m_s=bar.wheel_speed_m_s,
                )
                begin, press = end, float(np.exp(self._scatter.press * self._rng.normal()))
