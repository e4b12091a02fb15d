"""Orders to the station: bytes -> ``Order`` or ``Refusal``. Core: time is handed in.

The JSON Schemas ``edgewatch/wire/schemas/order.*.json`` say the same as the table here; a property test holds the two
together, so the station itself needs no schema library.
"""

from __future__ import annotations

import json
import math
import re
from collections import OrderedDict, deque
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass, field, replace
from typing import Any

from edgewatch.settings import GRADE_NAME
from edgewatch.wire.messages import Body, reply
from edgewatch.wire.times import read_time
from edgewatch.wire.topics import Topics

ORDER_VERSION = 1
MOST_REMEMBERED = 100_000
"""Identifiers of past orders kept at most (about 15 MB); beyond that orders are refused, never forgotten early."""
MINUTE_S = 60.0

_ID = re.compile(r"[A-Za-z0-9._:-]{1,64}")
_LINE = re.compile(r"[^\x00-\x1f\x7f\x80-\x9f\u2028\u2029\ud800-\udfff]{0,128}")


@dataclass(frozen=True, slots=True, kw_only=True)
class Order:
    """One well-formed order. Fields that its kind does not use keep their defaults.

    ``sent_utc_s``: when the sender says it sent it (s since 1970 UTC); ``who``: the person or program it names;
    ``grade``, ``heat``, ``order_number``, ``wheel_surface_speed_m_s`` (NaN: not said): of ``expect``; ``grade`` and
    ``bars``, ``verify``: of ``teach``; ``alert``: of ``acknowledge``;
    ``reply_topic``, ``correlation``: MQTT 5 response topic.
    ``request``: what was asked for, as the sender wrote it, for the record.
    """

    name: str
    id: str
    sent_utc_s: float
    who: str
    grade: str = ""
    heat: str = ""
    order_number: str = ""
    wheel_surface_speed_m_s: float = math.nan
    alert: str = ""
    bars: int = 0
    verify: bool = False
    reason: str = ""
    request: Mapping[str, Any] = field(default_factory=dict, hash=False)
    reply_topic: str = ""
    correlation: bytes = b""


@dataclass(frozen=True, slots=True, kw_only=True)
class Refusal:
    """An order that is not carried out, and why. ``quiet``: count it, record and answer nothing (a flood)."""

    name: str
    reason: str
    id: str = ""
    who: str = ""
    sent_utc_s: float = math.nan
    request: Mapping[str, Any] = field(default_factory=dict, hash=False)
    reply_topic: str = ""
    correlation: bytes = b""
    quiet: bool = False


def answer(found: Order | Refusal, *, reason: str = "", accepted: bool | None = None) -> Body:
    """Return the body of kind ``order`` that records and answers ``found``.

    An ``Order`` is accepted unless the station says otherwise with ``accepted`` and ``reason``.
    """
    refused = isinstance(found, Refusal)
    return reply(
        order=found.name,
        order_id=found.id,
        who=found.who,
        sent_utc_s=found.sent_utc_s,
        request=found.request,
        accepted=(not refused) if accepted is None else accepted and not refused,
        reason=reason or (found.reason if isinstance(found, Refusal) else ""),
    )


class _MalformedError(Exception):
    """Carries what is wrong."""


def _line(value: Any) -> str:
    if not (isinstance(value, str) and _LINE.fullmatch(value)):
        raise _MalformedError("one line of at most 128 characters")
    return value


def _filled(value: Any) -> str:
    if not _line(value):
        raise _MalformedError("one line of 1 to 128 characters")
    return str(value)


def _id(value: Any) -> str:
    if not (isinstance(value, str) and _ID.fullmatch(value)):
        raise _MalformedError("1 to 64 letters, digits, dots, colons, minus signs and underlines")
    return value


def _time(value: Any) -> float:
    try:
        return read_time(value if isinstance(value, str) else "")
    except ValueError:
        raise _MalformedError("an RFC 3339 time such as 2026-03-01T06:00:00Z") from None


def _grade(value: Any) -> str:
    if not (isinstance(value, str) and GRADE_NAME.fullmatch(value)):
        raise _MalformedError("a grade name: letters, digits, dot, plus, minus, underline; 40 at most")
    return value


def _grade_or_none(value: Any) -> str:
    return "" if value == "" else _grade(value)


def _speed(value: Any) -> float:
    if isinstance(value, bool) or not isinstance(value, (int, float)) or not 0 < value <= 200:
        raise _MalformedError("a number above 0 and up to 200")
    return float(value)


def _bars(value: Any) -> int:
    if isinstance(value, bool) or not isinstance(value, (int, float)) or not 1 <= value <= 1000 or value != int(value):
        raise _MalformedError("a whole number from 1 to 1000")
    return int(value)


def _flag(value: Any) -> bool:
    if not isinstance(value, bool):
        raise _MalformedError("true or false")
    return value


Check = Callable[[Any], Any]
_COMMON: dict[str, Check] = {"id": _id, "sent": _time, "who": _filled}
ORDERS: dict[str, tuple[dict[str, Check], dict[str, Check]]] = {
    "expect": (
        {"grade": _grade_or_none},
        {"heat": _line, "order_number": _line, "wheel_surface_speed_m_s": _speed},
    ),
    "acknowledge": ({"alert": _filled}, {}),
    "release": ({}, {"reason": _line}),
    "view": ({}, {}),
    "teach": ({"grade": _grade, "bars": _bars}, {"verify": _flag}),
}
"""Order -> what it must hold and what it may hold, on top of ``id``, ``sent``, ``who`` and the optional ``schema``."""


def read_order(
    topic: str,
    payload: bytes,
    *,
    topics: Topics,
    retained: bool = False,
    most_bytes: int = 4096,
    response_topic: str = "",
    correlation: bytes = b"",
) -> Order | Refusal | None:
    """Read one message that came in on ``topic``; ``None``: it is no order to this station.

    Refused: retained, larger than ``most_bytes``, unknown order, not a JSON object in UTF-8, a key missing, unknown,
    given twice or with a wrong value. Never raises, whatever the bytes.
    """
    name = topics.order_name(topic)
    if name is None:
        return None
    refusal = Refusal(name=name[:64].encode("utf-8", "replace").decode(), reason="")
    if response_topic:
        if not topics.may_answer_on(response_topic):
            return replace(refusal, reason="the response topic is not allowed")
        refusal = replace(refusal, reply_topic=response_topic, correlation=correlation)
    if name not in ORDERS:
        return replace(refusal, reason=f"unknown order; known are {', '.join(ORDERS)}")
    if retained:
        return replace(refusal, reason="retained orders are refused: send it anew, not retained")
    if len(payload) > most_bytes:
        return replace(refusal, reason=f"oversized: {len(payload)} bytes, {most_bytes} are allowed")
    try:
        content = _parse(payload)
    except _MalformedError as error:
        return replace(refusal, reason=f"malformed: {error}")
    return _from_content(name, content, refusal)


def _from_content(name: str, content: dict[str, Any], refusal: Refusal) -> Order | Refusal:
    kept, problems = _checked(name, content)
    named = replace(refusal, id=kept.get("id", ""), who=kept.get("who", ""), sent_utc_s=kept.get("sent", math.nan))
    if problems:
        return replace(named, reason=f"malformed: {'; '.join(problems)}"[:500])
    sent_utc_s = kept.pop("sent")
    request = {key: content[key] for key in kept if key not in _COMMON}
    return Order(
        name=name,
        sent_utc_s=sent_utc_s,
        request=request,
        reply_topic=refusal.reply_topic,
        correlation=refusal.correlation,
        **kept,
    )


def _parse(payload: bytes) -> dict[str, Any]:
    """Return the JSON object in ``payload``; strict: UTF-8 only, no NaN, no key twice."""
    try:
        content = json.loads(payload.decode("utf-8"), object_pairs_hook=_object, parse_constant=_no_constant)
    except UnicodeDecodeError:
        raise _MalformedError("not UTF-8") from None
    except (ValueError, RecursionError):
        raise _MalformedError("not JSON") from None
    if not isinstance(content, dict):
        raise _MalformedError("not a JSON object")
    return content


def _object(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
    found = dict(pairs)
    if len(found) != len(pairs):
        raise _MalformedError("a key is given twice")
    return found


def _no_constant(text: str) -> Any:
    raise _MalformedError(f"{text} is not JSON")


def _checked(name: str, content: dict[str, Any]) -> tuple[dict[str, Any], list[str]]:
    """Return the values that are right, and what is wrong with the others."""
    needed, allowed = ORDERS[name]
    checks = {**_COMMON, **needed, **allowed}
    kept: dict[str, Any] = {}
    problems = [f"{key} is missing" for key in (*_COMMON, *needed) if key not in content]
    for key, value in content.items():
        if key == "schema":
            if not _is_schema(name, value):
                problems.append(f"schema: edgewatch.order.{name}, version {ORDER_VERSION} is needed")
        elif key not in checks:
            problems.append(f"{key[:40]!a}: no such key")
        else:
            try:
                kept[key] = checks[key](value)
            except _MalformedError as error:
                problems.append(f"{key}: {error} is needed")
    return kept, problems


def _is_schema(name: str, value: Any) -> bool:
    if not isinstance(value, dict) or set(value) != {"name", "version"}:
        return False
    version = value["version"]
    right = not isinstance(version, bool) and isinstance(version, (int, float)) and version == ORDER_VERSION
    return bool(right and value["name"] == f"edgewatch.order.{name}")


class OrderGate:
    """Age, rate and repeats of orders. Times are handed in; nothing is read here.

    ``most_per_minute`` well-formed orders pass in any 60 s, and as many refusals are recorded: a flood of junk neither
    fills the journal nor keeps good orders out. An order whose ``sent`` lies more than ``oldest_s`` from the station's
    own UTC clock, either way, is refused, and identifiers are remembered for twice that, so none passes twice.
    ``seen``: identifiers kept from the last run (``remembered``).
    """

    def __init__(
        self, *, most_per_minute: int = 60, oldest_s: float = 60.0, seen: Iterable[str] = (), monotonic_s: float = 0.0
    ) -> None:
        self._most = most_per_minute
        self._oldest_s = oldest_s
        self._passed: deque[float] = deque()
        self._refused: deque[float] = deque()
        self._seen: OrderedDict[str, float] = OrderedDict((str(name), monotonic_s) for name in seen)

    def remembered(self) -> tuple[str, ...]:
        """Return the identifiers that must not pass again, oldest first: keep them over a restart."""
        return tuple(self._seen)

    def admit(self, found: Order | Refusal, *, utc_s: float, monotonic_s: float) -> Order | Refusal:
        """Return ``found``, or why it is refused after all. Repeats of one ``id`` pass once."""
        self._forget(monotonic_s)
        if isinstance(found, Order):
            reason = self._reason(found, utc_s)
            if not reason:
                self._passed.append(monotonic_s)
                self._seen[found.id] = monotonic_s
                return found
            found = Refusal(
                name=found.name,
                reason=reason,
                id=found.id,
                who=found.who,
                sent_utc_s=found.sent_utc_s,
                request=found.request,
                reply_topic=found.reply_topic,
                correlation=found.correlation,
            )
        if len(self._refused) >= self._most:
            return replace(found, quiet=True)
        self._refused.append(monotonic_s)
        return found

    def _reason(self, order: Order, utc_s: float) -> str:
        if order.id in self._seen:
            return "duplicate: an order with this id was taken before"
        age_s = utc_s - order.sent_utc_s
        if not abs(age_s) <= self._oldest_s:
            way = "too old" if age_s > 0 else "from the future"
            return f"{way}: sent {abs(age_s):.0f} s away from the station's clock, {self._oldest_s:g} s are allowed"
        if len(self._passed) >= self._most:
            return f"rate exceeded: {self._most} orders a minute are allowed"
        if len(self._seen) >= MOST_REMEMBERED:
            return "rate exceeded: too many orders within the time in which a repeat is told"
        return ""

    def _forget(self, monotonic_s: float) -> None:
        for times in (self._passed, self._refused):
            while times and monotonic_s - times[0] >= MINUTE_S:
                times.popleft()
        while self._seen:
            first = next(iter(self._seen))
            if monotonic_s - self._seen[first] <= 2 * self._oldest_s:
                break
            self._seen.popitem(last=False)
