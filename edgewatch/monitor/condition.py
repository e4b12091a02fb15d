"""Condition of the station: active causes -> one of the five words of NAMUR NE 107. The worst word counts."""

from __future__ import annotations

from collections.abc import Iterable

from edgewatch.judge.causes import CAUSES, CONDITIONS, GOOD, MAINTENANCE


class Complaints:
    """The causes active now, each with a detail for people. ``raise_`` and ``clear`` say whether anything changed.

    ``tolerated``: causes that somebody has knowingly put up with. They are named, as ``maintenance_required``, and
    keep no bar from being called conforming.
    """

    def __init__(self, tolerated: Iterable[str] = ()) -> None:
        self._active: dict[str, str] = {}
        self._tolerated = frozenset(tolerated)

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
        return tuple(sorted(self._active, key=lambda name: -CONDITIONS.index(self.word(name))))

    def word(self, cause: str) -> str:
        """The condition that ``cause`` makes by itself."""
        return MAINTENANCE if cause in self._tolerated else CAUSES[cause].condition

    @property
    def blinding(self) -> tuple[str, ...]:
        """The active causes that keep the station from seeing."""
        return tuple(name for name in self.causes if CAUSES[name].blinds and name not in self._tolerated)

    @property
    def withholding(self) -> tuple[str, ...]:
        """The active causes that keep every bar from being called conforming: the blinding ones among them."""
        return tuple(name for name in self.causes if self.withholds(name))

    def withholds(self, cause: str) -> bool:
        """Whether ``cause`` keeps bars from being called conforming while it is active."""
        return (CAUSES[cause].blinds or CAUSES[cause].withholds) and cause not in self._tolerated

    @property
    def condition(self) -> str:
        """The worst word."""
        causes = self.causes
        return self.word(causes[0]) if causes else GOOD

    def detail(self, cause: str) -> str:
        """What is known beyond the cause's own sentence; empty if nothing."""
        return self._active.get(cause, "")
