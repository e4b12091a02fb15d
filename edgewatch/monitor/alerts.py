"""Alerts: raised, acknowledged, cleared, as in IEC 62682 (normal, unacknowledged, acknowledged, returned to normal).

One table holds every transition; an event that the table does not list changes nothing. A latched alert stays until it
is acknowledged, even when its reason has gone.
"""

from __future__ import annotations

import enum
from dataclasses import dataclass, replace
from types import MappingProxyType


class AlertState(str, enum.Enum):
    """States of one alert; ``LINGERING`` is shown as raised: its reason has gone and nobody has seen it yet."""

    RAISED = "raised"
    ACKNOWLEDGED = "acknowledged"
    LINGERING = "lingering"
    CLEARED = "cleared"


class AlertEvent(str, enum.Enum):
    """What can happen to an alert."""

    RECUR = "recur"  # its reason is there again
    ACKNOWLEDGE = "acknowledge"  # somebody has seen it
    GO = "go"  # its reason has gone, alert not latched
    GO_LATCHED = "go_latched"  # its reason has gone, alert latched


TRANSITIONS = MappingProxyType(
    {
        (AlertState.RAISED, AlertEvent.ACKNOWLEDGE): AlertState.ACKNOWLEDGED,
        (AlertState.RAISED, AlertEvent.GO): AlertState.CLEARED,
        (AlertState.RAISED, AlertEvent.GO_LATCHED): AlertState.LINGERING,
        (AlertState.ACKNOWLEDGED, AlertEvent.GO): AlertState.CLEARED,
        (AlertState.ACKNOWLEDGED, AlertEvent.GO_LATCHED): AlertState.CLEARED,
        (AlertState.LINGERING, AlertEvent.ACKNOWLEDGE): AlertState.CLEARED,
        (AlertState.LINGERING, AlertEvent.RECUR): AlertState.RAISED,
    }
)


@dataclass(frozen=True, slots=True, kw_only=True)
class Alert:
    """One alert. ``number`` is unique on the station; ``reason`` is a cause's name or ``nonconforming_bar``;
    ``bar`` is the bar it belongs to, or ``None``; ``who`` acknowledged it.
    """

    number: int
    reason: str
    text: str
    latched: bool
    bar: int | None = None
    state: AlertState = AlertState.RAISED
    who: str = ""

    def after(self, event: AlertEvent) -> Alert:
        """The alert after ``event``; the same object when the table lists no transition."""
        state = TRANSITIONS.get((self.state, event))
        return self if state is None else replace(self, state=state)

    @property
    def shown(self) -> str:
        """The word published: raised, acknowledged or cleared."""
        return AlertState.RAISED.value if self.state is AlertState.LINGERING else self.state.value


MOST_OPEN = 200
"""Open alerts kept; beyond it the oldest lingering one is cleared, so that memory stays bounded for months."""


class AlertList:
    """The open alerts. Each method returns the alerts whose published word changed, to be told to the world."""

    def __init__(self, *, next_number: int = 1, open_alerts: tuple[Alert, ...] = ()) -> None:
        """Begin empty, or with what a former run left open."""
        self._next = next_number
        self._open = {alert.number: alert for alert in open_alerts}

    @property
    def open(self) -> tuple[Alert, ...]:
        """Open alerts in order of number."""
        return tuple(self._open.values())

    @property
    def next_number(self) -> int:
        """Number that the next alert will have."""
        return self._next

    def raise_(self, reason: str, text: str, *, latched: bool, bar: int | None = None) -> list[Alert]:
        """Raise an alert, or revive the open one with the same reason (and bar)."""
        for alert in self._open.values():
            if alert.reason == reason and alert.bar == bar:
                return self._apply(alert, AlertEvent.RECUR)
        changed = self._make_room()
        alert = Alert(number=self._next, reason=reason, text=text, latched=latched, bar=bar)
        self._next += 1
        self._open[alert.number] = alert
        return [*changed, alert]

    def go(self, reason: str, *, bar: int | None = None) -> list[Alert]:
        """The reason has gone."""
        changed: list[Alert] = []
        for alert in list(self._open.values()):
            if alert.reason == reason and alert.bar == bar:
                changed += self._apply(alert, AlertEvent.GO_LATCHED if alert.latched else AlertEvent.GO)
        return changed

    def acknowledge(self, number: int | None, who: str) -> list[Alert]:
        """Acknowledge one alert, or all of them with ``None``; unknown numbers change nothing."""
        chosen = list(self._open.values()) if number is None else [self._open[number]] if number in self._open else []
        changed: list[Alert] = []
        for alert in chosen:
            changed += self._apply(replace(alert, who=who), AlertEvent.ACKNOWLEDGE)
        return changed

    def _apply(self, alert: Alert, event: AlertEvent) -> list[Alert]:
        after = alert.after(event)
        if after is alert:
            return []
        if after.state is AlertState.CLEARED:
            del self._open[after.number]
        else:
            self._open[after.number] = after
        return [after] if after.shown != alert.shown else []

    def _make_room(self) -> list[Alert]:
        if len(self._open) < MOST_OPEN:
            return []
        oldest = next(
            (alert for alert in self._open.values() if alert.state is AlertState.LINGERING),
            next(iter(self._open.values())),
        )
        cleared = replace(oldest, state=AlertState.CLEARED, who="station: too many open alerts")
        del self._open[oldest.number]
        return [cleared]
