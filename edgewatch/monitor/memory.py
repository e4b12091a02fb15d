"""What the station remembers over a restart: JSON values under a few keys, written with the records they belong to.

Reading is forgiving: a value that cannot be used is left out, because a damaged memory must not keep a station down.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

from edgewatch.monitor.alerts import Alert, AlertList, AlertState
from edgewatch.monitor.stop import StopState
from edgewatch.settings import GRADE_NAME
from edgewatch.wire.messages import VERDICTS


@dataclass(frozen=True, slots=True, kw_only=True)
class Expectation:
    """What the line expects: ``grade`` (empty: judge nothing), heat, order number, who set it and when, and the
    wheel's surface speed where it was told (m/s, NaN: not). ``configured`` is the grade that the configuration named
    at that time.
    """

    grade: str
    heat: str = ""
    order_number: str = ""
    who: str = "settings"
    since_utc_s: float = math.nan
    wheel_surface_speed_m_s: float = math.nan
    configured: str = ""


@dataclass(frozen=True, slots=True, kw_only=True)
class Memory:
    """Everything remembered, as values."""

    bar: int = 0
    expectation: Expectation | None = None
    counts: Mapping[str, int] = field(default_factory=lambda: dict.fromkeys(VERDICTS, 0))
    stop: StopState = StopState.RUN
    stop_reason: str = ""
    next_alert: int = 1
    alerts: tuple[Alert, ...] = ()
    orders: tuple[str, ...] = ()
    drift: Mapping[str, Any] = field(default_factory=dict)


KEYS = ("bar", "expected", "counts", "stop", "alerts", "orders", "drift")
"""Keys under which the values lie in the journal."""


def read_memory(kept: Mapping[str, Any]) -> Memory:
    """Make sense of what was kept; what is not understood counts as not kept."""
    stop, reason = _stop(kept.get("stop"))
    next_alert, alerts = _alerts(kept.get("alerts"))
    bar, drift = kept.get("bar"), kept.get("drift")
    return Memory(
        bar=bar if isinstance(bar, int) and bar >= 0 else 0,
        expectation=_expectation(kept.get("expected")),
        counts=_counts(kept.get("counts")),
        stop=stop,
        stop_reason=reason,
        next_alert=next_alert,
        alerts=alerts,
        orders=tuple(str(one) for one in _list(kept.get("orders"))),
        drift=drift if isinstance(drift, Mapping) else {},
    )


def keep_expectation(value: Expectation) -> dict[str, Any]:
    """JSON form of what is expected."""
    return {
        "grade": value.grade,
        "heat": value.heat,
        "order_number": value.order_number,
        "who": value.who,
        "since_utc_s": value.since_utc_s if math.isfinite(value.since_utc_s) else None,
        "wheel_surface_speed_m_s": (
            value.wheel_surface_speed_m_s if math.isfinite(value.wheel_surface_speed_m_s) else None
        ),
        "configured": value.configured,
    }


def keep_alerts(alerts: AlertList) -> dict[str, Any]:
    """JSON form of the open alerts."""
    return {
        "next": alerts.next_number,
        "open": [
            {
                "number": one.number,
                "reason": one.reason,
                "text": one.text,
                "latched": one.latched,
                "bar": one.bar,
                "state": one.state.value,
                "who": one.who,
            }
            for one in alerts.open
        ],
    }


def _list(value: Any) -> list[Any]:
    return value if isinstance(value, list) else []


def _number(value: Any) -> float:
    return float(value) if isinstance(value, (int, float)) and not isinstance(value, bool) else math.nan


def _expectation(value: Any) -> Expectation | None:
    if not isinstance(value, Mapping):
        return None
    texts = {key: value.get(key, "") for key in ("grade", "heat", "order_number", "who", "configured")}
    if not all(isinstance(text, str) for text in texts.values()):
        return None
    if texts["grade"] and not GRADE_NAME.fullmatch(texts["grade"]):
        return None
    return Expectation(
        **texts,
        since_utc_s=_number(value.get("since_utc_s")),
        wheel_surface_speed_m_s=_number(value.get("wheel_surface_speed_m_s")),
    )


def _counts(value: Any) -> dict[str, int]:
    found = value if isinstance(value, Mapping) else {}
    return {name: found[name] if isinstance(found.get(name), int) and found[name] >= 0 else 0 for name in VERDICTS}


def _stop(value: Any) -> tuple[StopState, str]:
    found = value if isinstance(value, Mapping) else {}
    try:
        state = StopState(found.get("state", "run"))
    except ValueError:
        state = StopState.LATCHED  # something was kept and cannot be read: the safe reading is "stopped"
    reason = found.get("reason", "")
    return state, reason if isinstance(reason, str) else ""


def _alerts(value: Any) -> tuple[int, tuple[Alert, ...]]:
    found = value if isinstance(value, Mapping) else {}
    alerts = tuple(alert for alert in map(_alert, _list(found.get("open"))) if alert is not None)
    next_number = found.get("next")
    least = max((one.number for one in alerts), default=0) + 1
    return max(next_number if isinstance(next_number, int) else 1, least), alerts


def _alert(one: Any) -> Alert | None:
    try:
        return Alert(
            number=int(one["number"]),
            reason=str(one["reason"]),
            text=str(one["text"]),
            latched=bool(one["latched"]),
            bar=None if one["bar"] is None else int(one["bar"]),
            state=AlertState(one["state"]),
            who=str(one["who"]),
        )
    except (KeyError, TypeError, ValueError):
        return None
