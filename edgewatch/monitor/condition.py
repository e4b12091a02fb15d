"""Condition of the station: active causes -> one of the five words of NAMUR NE 107.

Each cause is declared once: its word, whether it blinds the station (no bar is conforming while it lasts), and a
sentence. Where several are active the worst word counts, in the order failure, function check, out of specification,
maintenance required. Manuals of field devices differ in the middle of that order; ours puts a deliberate check before
doubtful figures, because while somebody works on the station its figures mean nothing at all.
"""

from __future__ import annotations

from dataclasses import dataclass
from types import MappingProxyType

GOOD = "good"
MAINTENANCE = "maintenance_required"
OUT_OF_SPECIFICATION = "out_of_specification"
FUNCTION_CHECK = "function_check"
FAILURE = "failure"
CONDITIONS = (GOOD, MAINTENANCE, OUT_OF_SPECIFICATION, FUNCTION_CHECK, FAILURE)
"""From best to worst."""


@dataclass(frozen=True, slots=True)
class Cause:
    """One thing that can be wrong: the condition it makes, whether it blinds, and what it means."""

    condition: str
    blinds: bool
    sentence: str


CAUSES = MappingProxyType(
    {
        # What the pictures or the camera say.
        "no_light": Cause(FAILURE, True, "the pictures are dark in a way that no working camera's are"),
        "saturated": Cause(OUT_OF_SPECIFICATION, True, "large parts of the pictures are at full scale"),
        "out_of_focus": Cause(OUT_OF_SPECIFICATION, True, "streaks are much wider than the optics allow"),
        "soiled": Cause(OUT_OF_SPECIFICATION, True, "streaks are much dimmer or wider than when the band was taught"),
        "vibration": Cause(OUT_OF_SPECIFICATION, True, "the pictures shake against the background"),
        "crowded": Cause(OUT_OF_SPECIFICATION, True, "streaks overlap so much that counts are not trusted"),
        "stray_light": Cause(OUT_OF_SPECIFICATION, True, "the background is high or uneven and leaves no contrast"),
        "stalled": Cause(FAILURE, True, "the camera delivers no pictures"),
        "camera_lost": Cause(FAILURE, True, "the camera or stream is gone and is being opened anew"),
        "frozen": Cause(FAILURE, True, "the camera delivers the same picture again and again"),
        "dropping": Cause(OUT_OF_SPECIFICATION, True, "so many frames are skipped that a bar may be missed"),
        "wrong_size": Cause(FAILURE, True, "the pictures do not have the configured size"),
        "wrong_rate": Cause(OUT_OF_SPECIFICATION, True, "the frame rate is not the configured one"),
        "wrong_exposure": Cause(OUT_OF_SPECIFICATION, True, "the camera does not use the configured exposure"),
        "no_contact": Cause(OUT_OF_SPECIFICATION, True, "the line reports a bar at the wheel and no sparks are seen"),
        # What the bands and figures say.
        "unknown_grade": Cause(OUT_OF_SPECIFICATION, False, "no band is taught for the expected grade"),
        "band_misfit": Cause(OUT_OF_SPECIFICATION, False, "the band was taught with other optics or camera settings"),
        "band_unreadable": Cause(MAINTENANCE, False, "a band file cannot be used"),
        "wheel_speed": Cause(
            OUT_OF_SPECIFICATION, False, "spark speed does not fit the wheel's surface speed: optics, exposure or wheel"
        ),
        "drift": Cause(MAINTENANCE, False, "conforming bars shift slowly together: wheel wear or soiling"),
        "teaching": Cause(FUNCTION_CHECK, False, "reference bars are being taken; they are not judged"),
        # What the ports say.
        "broker_lost": Cause(MAINTENANCE, False, "the broker is away; messages wait in the journal"),
        "broker_refuses": Cause(MAINTENANCE, False, "the broker refuses this station: user, password or rights"),
        "broker_untrusted": Cause(MAINTENANCE, False, "the broker's certificate is not trusted or has expired"),
        "relay_lost": Cause(FAILURE, False, "the relay does not answer or is not in the wanted state"),
        "journal_lost": Cause(FAILURE, False, "the journal cannot be written; records wait in memory"),
        "records_shed": Cause(FAILURE, False, "the journal was away too long; records were given up, and counted"),
        "journal_damaged": Cause(
            MAINTENANCE, False, "a damaged journal was set aside whole; a new one was begun beside it"
        ),
        "windows_thinned": Cause(MAINTENANCE, False, "unsent window messages were thinned to save space"),
        "evidence_lost": Cause(MAINTENANCE, False, "evidence pictures cannot be kept"),
        "clock_not_synced": Cause(MAINTENANCE, False, "the clock is not synchronised; times in messages may be wrong"),
        "part_restarted": Cause(MAINTENANCE, False, "a part of the station failed and was started again"),
    }
)


@dataclass(slots=True)
class Complaints:
    """The causes active now, each with a detail for people. ``raise_`` and ``clear`` say whether anything changed."""

    _active: dict[str, str]

    def __init__(self) -> None:
        """Begin with no complaint."""
        self._active = {}

    def raise_(self, cause: str, detail: str = "") -> bool:
        """Make ``cause`` active. Raises ``ValueError`` on a cause that is not declared."""
        if cause not in CAUSES:
            raise ValueError(f"cause {cause!r} is not declared")
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
