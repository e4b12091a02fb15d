"""Condition of the station: active causes -> one of the five words of NAMUR NE 107. The worst word counts."""

from __future__ import annotations

from edgewatch.judge.causes import CAUSES, CONDITIONS, GOOD


class Complaints:
    """The causes active now, each with a detail for people. ``raise_`` and ``clear`` say whether anything changed."""

    def __init__(self) -> None:
        self._active: dict[str, str] = {}

    def raise_(self, cause: str, detail: str = "") -> bool:
        """Make ``cause`` active. Raises ``ValueError`` on one that is not declared as the station's."""
        if cause not in CAUSES or not CAUSES[cause].condition:
            raise ValueError(f"cause {cause!r} is not declared as the station's")
        if cause in self._active:
            return False
        self._active[cause] = detail
        return True

    def clear(self, cause: str) -> bool:
        """End ``cause``; no harm if it is not active."""
        return self._active.pop(cause, None) is not None

    def set(self, cause: str, active: bool, detail: str = "") -> bool:
        """Make ``cause`` active or not, as ``active`` says."""
        return self.raise_(cause, detail) if active else self.clear(cause)

    @property
    def causes(self) -> tuple[str, ...]:
        """Names of the active causes, worst first, then in order of appearance."""
        return tuple(sorted(self._active, key=lambda name: -CONDITIONS.index(CAUSES[name].condition)))

    @property
    def blinding(self) -> tuple[str, ...]:
        """The active causes that keep the station from seeing."""
        return tuple(name for name in self.causes if CAUSES[name].blinds)

    @property
    def condition(self) -> str:
        """The worst word."""
        causes = self.causes
        return CAUSES[causes[0]].condition if causes else GOOD

    def detail(self, cause: str) -> str:
        """What is known beyond the cause's own sentence; empty if nothing."""
        return self._active.get(cause, "")
