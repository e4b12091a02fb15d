"""Message bodies from plain values, and whole payloads from bodies. Core: reads no clock.

A *body* is what a builder here returns: JSON values with units in the key names. ``finish`` puts ``schema``, ``seq``,
``time`` and ``clock_synced`` in front of it; the journal does so when it records, because ``seq`` is given there.
Numbers that are not finite become null: a message never holds NaN.
"""

from __future__ import annotations

import base64
import dataclasses
import json
import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from edgewatch.figures.values import Figures
from edgewatch.wire.kinds import KINDS
from edgewatch.wire.times import write_time

Body = dict[str, Any]

VERDICTS = ("conforming", "nonconforming", "inconclusive")
"""ISO 10576-1 / JCGM 106."""
CONDITIONS = ("good", "maintenance_required", "out_of_specification", "function_check", "failure")
"""NAMUR NE 107."""
ALERT_STATES = ("raised", "acknowledged", "cleared")
"""IEC 62682."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Stamp:
    """When something was recorded: boot id, monotonic clock of that boot (s), UTC (s since 1970), and whether the
    UTC clock was synchronised at that moment (a board without a battery clock jumps at its first time sync).
    """

    boot: str
    monotonic_s: float
    utc_s: float
    synced: bool


def _one_of(name: str, value: str, allowed: Sequence[str]) -> str:
    if value not in allowed:
        raise ValueError(f"{name} = {value!r}: one of {', '.join(allowed)} is needed")
    return value


def figures(values: Figures) -> Body:
    """Figures under their contract names."""
    return {part.name: getattr(values, part.name) for part in dataclasses.fields(values)}


def band(
    *,
    grade: str,
    burst_rate_low_per_m: float,
    burst_rate_high_per_m: float,
    reach_low_mm: float = math.nan,
    reach_high_mm: float = math.nan,
) -> Body:
    """One band; NaN reach where the band holds none."""
    return {
        "grade": grade,
        "burst_rate_low_per_m": burst_rate_low_per_m,
        "burst_rate_high_per_m": burst_rate_high_per_m,
        "reach_low_mm": reach_low_mm,
        "reach_high_mm": reach_high_mm,
    }


def presence(*, online: bool, version: str, since_utc_s: float, reason: str = "") -> Body:
    """Online or offline. ``since_utc_s``: when the station began (online) or stopped (offline); NaN in a will, which
    is written before anybody can know. ``reason``: ``stopped`` or ``lost`` when offline.
    """
    since = write_time(since_utc_s) if math.isfinite(since_utc_s) else None
    return {"state": "online" if online else "offline", "version": version, "since": since, "reason": reason}


def cause(*, cause: str, condition: str, detail: str = "") -> Body:
    """One cause of a condition: a name for programs, a sentence for people."""
    return {"cause": cause, "condition": _one_of("condition", condition, CONDITIONS), "detail": detail}


def condition(*, condition: str, causes: Sequence[Body] = ()) -> Body:
    """Condition of the station with its causes (of ``cause``)."""
    return {"condition": _one_of("condition", condition, CONDITIONS), "causes": list(causes)}


def expected(
    *,
    grade: str,
    heat: str = "",
    order_number: str = "",
    who: str = "",
    wheel_surface_speed_m_s: float = math.nan,
) -> Body:
    """What the line expects. An empty grade: nothing is judged. ``who``: the sender of the order, or ``settings``."""
    return {
        "grade": grade,
        "heat": heat,
        "order_number": order_number,
        "who": who,
        "wheel_surface_speed_m_s": wheel_surface_speed_m_s,
    }


def window(*, values: Figures, bar: int | None) -> Body:
    """Figures of one window; ``bar``: number of the bar in contact, ``None`` between bars."""
    return {"bar": bar, **figures(values)}


def bar(
    *,
    bar: int,
    expected: str,
    verdict: str,
    values: Figures,
    decided_after_s: float = math.nan,
    causes: Sequence[str] = (),
    nearest: Sequence[tuple[str, float]] = (),
    heat: str = "",
    order_number: str = "",
    band: Body | None = None,
    pictures: Sequence[str] = (),
    extra: Mapping[str, Any] | None = None,
) -> Body:
    """Verdict and figures of one bar. ``nearest``: taught grades with their weights, best first; ``pictures``: file
    names in the evidence folder; ``extra``: further numbers of the judging, under ``details``.
    """
    return {
        "bar": bar,
        "expected": expected,
        "heat": heat,
        "order_number": order_number,
        "verdict": _one_of("verdict", verdict, VERDICTS),
        "decided_after_s": decided_after_s,
        "causes": list(causes),
        "nearest": [[grade, weight] for grade, weight in nearest],
        **figures(values),
        "band": band,
        "pictures": list(pictures),
        "details": dict(extra or {}),
    }


def alert(
    *,
    alert: str,
    state: str,
    text: str,
    latched: bool = False,
    bar: int | None = None,
    who: str = "",
) -> Body:
    """One change of an alert. ``alert``: its lasting name, what ``acknowledge`` orders refer to."""
    return {
        "alert": alert,
        "state": _one_of("state", state, ALERT_STATES),
        "text": text,
        "latched": latched,
        "bar": bar,
        "who": who,
    }


def relay(
    *, wanted: str, energised: bool, read_back: str, reason: str, latched: bool, bar: int | None = None, who: str = ""
) -> Body:
    """One switch of the relay. ``wanted``: run or stop; ``read_back``: run, stop or unknown."""
    return {
        "wanted": _one_of("wanted", wanted, ("run", "stop")),
        "energised": energised,
        "read_back": _one_of("read_back", read_back, ("run", "stop", "unknown")),
        "reason": reason,
        "latched": latched,
        "bar": bar,
        "who": who,
    }


def thinned(*, count: int, first_seq: int, last_seq: int, keep_every: int, total: int) -> Body:
    """Window messages that gave way: ``count`` between ``first_seq`` and ``last_seq`` since the last such message, so
    that one window in ``keep_every`` is sent (1: all again); ``total`` since the journal began.
    """
    return {
        "count": count,
        "first_seq": first_seq,
        "last_seq": last_seq,
        "keep_every": keep_every,
        "total": total,
    }


def summary(
    *,
    condition: str,
    expected: str,
    since_utc_s: float,
    conforming: int,
    nonconforming: int,
    inconclusive: int,
    values: Figures | None = None,
    bands: Sequence[Body] = (),
    frames_seen: int = 0,
    frames_skipped: int = 0,
    unsent: int = 0,
    windows_thinned: int = 0,
    relay: str = "",
    alerts: Sequence[str] = (),
    extra: Mapping[str, Any] | None = None,
) -> Body:
    """The station at a glance: live, not journalled, so it is true also while a long backlog is sent.

    ``since_utc_s``: when the order in force began; ``values``: rolling figures; ``unsent``: messages in the outbox;
    ``relay``: run, stop, or empty without one; ``alerts``: names of the alerts that stand.
    """
    return {
        "condition": _one_of("condition", condition, CONDITIONS),
        "expected": expected,
        "since": write_time(since_utc_s) if math.isfinite(since_utc_s) else None,
        "bars": {"conforming": conforming, "nonconforming": nonconforming, "inconclusive": inconclusive},
        "figures": None if values is None else figures(values),
        "bands": list(bands),
        "frames_seen": frames_seen,
        "frames_skipped": frames_skipped,
        "unsent": unsent,
        "windows_thinned": windows_thinned,
        "relay": _one_of("relay", relay, ("", "run", "stop")),
        "alerts": list(alerts),
        "details": dict(extra or {}),
    }


def view(*, jpeg: bytes, width_px: int, height_px: int, frame: int, request: str = "") -> Body:
    """An annotated picture; ``request``: id of the order that asked for it."""
    return {
        "frame": frame,
        "width_px": width_px,
        "height_px": height_px,
        "request": request,
        "content_type": "image/jpeg",
        "jpeg_base64": base64.b64encode(jpeg).decode("ascii"),
    }


def reply(
    *,
    order: str,
    accepted: bool,
    reason: str = "",
    order_id: str = "",
    who: str = "",
    sent_utc_s: float = math.nan,
    request: Mapping[str, Any] | None = None,
) -> Body:
    """An order as it was taken or refused: both its record and its answer. ``reason``: why refused, or what was done;
    ``request``: what the order asked for.
    """
    return {
        "order": order,
        "id": order_id,
        "who": who,
        "sent": write_time(sent_utc_s) if math.isfinite(sent_utc_s) else None,
        "accepted": accepted,
        "reason": reason,
        "request": dict(request or {}),
    }


def finish(kind: str, body: Mapping[str, Any], stamp: Stamp, *, seq: int | None = None) -> Body:
    """Return the payload: ``schema``, ``seq`` where given, ``time``, ``clock_synced``, then the body; NaN is null."""
    if kind not in KINDS:
        raise ValueError(f"kind = {kind!r}: known are {', '.join(KINDS)}")
    head: Body = {"schema": {"name": KINDS[kind].schema, "version": KINDS[kind].version}}
    if seq is not None:
        head["seq"] = seq
    head["time"] = write_time(stamp.utc_s)
    head["clock_synced"] = stamp.synced
    for key, value in body.items():
        head[key] = plain(value)
    return head


def repeated(payload: Mapping[str, Any]) -> Body:
    """Return a journalled state as it is sent anew after a reconnect: ``seq`` becomes ``repeat_of_seq``.

    So each ``seq`` goes out once and in order even when a long backlog is still on its way.
    """
    return {("repeat_of_seq" if key == "seq" else key): value for key, value in payload.items()}


def plain(value: Any) -> Any:
    """Return ``value`` made of JSON values only: numbers that are not finite become null, numpy scalars Python's.

    Raises ``ValueError`` for a value that JSON has no form for.
    """
    if value is None or isinstance(value, (bool, str)):
        return value
    if isinstance(value, Mapping):
        return {str(key): plain(part) for key, part in value.items()}
    if isinstance(value, (list, tuple)):
        return [plain(part) for part in value]
    if hasattr(value, "item") and getattr(value, "shape", None) == ():
        value = value.item()
    if isinstance(value, (bool, int)):
        return value
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    raise ValueError(f"{value!r}: has no form in JSON")


def encode(payload: Mapping[str, Any]) -> bytes:
    """Return the payload as compact UTF-8 JSON. Raises ``ValueError`` for NaN or a value JSON has no form for."""
    text = json.dumps(payload, ensure_ascii=False, allow_nan=False, separators=(",", ":"))
    return text.encode("utf-8", "replace")  # a lone surrogate becomes "?": a message is always UTF-8
