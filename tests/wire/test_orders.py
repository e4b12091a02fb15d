"""Orders: read strictly, gated by age, rate and repeats."""

from __future__ import annotations

import json
import math
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from edgewatch.settings import StationSettings
from edgewatch.wire import messages
from edgewatch.wire.messages import Stamp
from edgewatch.wire.orders import MOST_REMEMBERED, ORDERS, Order, OrderGate, Refusal, answer, read_order
from edgewatch.wire.times import read_time
from edgewatch.wire.topics import Topics
from tests.wire.schemas import validator
from tests.wire.strategies import junk, order_contents

TOPICS = Topics.of(StationSettings(site="hollowmere", line="peel-2", name="wheel-a"))
GOOD: dict[str, dict[str, Any]] = {
    "expect": {"grade": "C45", "heat": "H-1", "order_number": "7", "wheel_surface_speed_m_s": 35},
    "acknowledge": {"alert": "nonconforming_bar"},
    "release": {"reason": "bar taken out"},
    "view": {},
    "teach": {"grade": "42CrMo4", "bars": 5},
}
COMMON = {"id": "desk-1", "sent": "2026-03-01T06:00:00Z", "who": "shift lead"}


def _read(name: str, content: Any, **options: Any) -> Order | Refusal:
    payload = content if isinstance(content, bytes) else json.dumps(content).encode()
    found = read_order(TOPICS.order(name), payload, topics=TOPICS, **options)
    assert found is not None
    return found


@pytest.mark.parametrize("name", ORDERS)
def test_a_right_order_is_read_whole(name: str):
    """Every order, with and without the schema key."""
    content = {**COMMON, **GOOD[name]}
    for extra in ({}, {"schema": {"name": f"edgewatch.order.{name}", "version": 1}}):
        found = _read(name, {**content, **extra}, response_topic="desk/answers", correlation=b"\x01")
        assert isinstance(found, Order)
        assert (found.name, found.id, found.who, found.reply_topic) == (name, "desk-1", "shift lead", "desk/answers")
        assert found.sent_utc_s == read_time("2026-03-01T06:00:00Z")
        assert found.request == GOOD[name]
        for key, value in GOOD[name].items():
            assert getattr(found, key) == value


def test_fields_that_an_order_does_not_give_keep_their_defaults():
    """A change of grade alone says nothing about speed or heat."""
    found = _read("expect", {**COMMON, "grade": ""})
    assert isinstance(found, Order)
    assert (found.grade, found.heat, found.order_number) == ("", "", "")
    assert math.isnan(found.wheel_surface_speed_m_s)


@pytest.mark.parametrize(
    ("name", "payload", "options", "reason"),
    [
        ("view", {**COMMON}, {"retained": True}, "retained"),
        ("view", {**COMMON, "who": "x" * 5000}, {}, "oversized"),
        ("view", {**COMMON}, {"most_bytes": 64}, "oversized"),
        ("shutdown", {**COMMON}, {}, "unknown order"),
        ("view/more", {**COMMON}, {}, "unknown order"),
        ("view", b"\xff\xfe", {}, "not UTF-8"),
        ("view", b"", {}, "not JSON"),
        ("view", b"[" * 4000, {}, "not JSON"),
        ("view", b'{"id": NaN}', {}, "NaN is not JSON"),
        ("view", b'{"id":"1","id":"2"}', {}, "twice"),
        ("view", [1], {}, "not a JSON object"),
        ("view", {"id": "1"}, {}, "sent is missing; who is missing"),
        ("view", {**COMMON, "path": "/etc"}, {}, "'path': no such key"),
        ("view", {**COMMON, "id": "a b"}, {}, "id: 1 to 64"),
        ("view", {**COMMON, "sent": "yesterday"}, {}, "sent: an RFC 3339 time"),
        ("view", {**COMMON, "who": "two\nlines"}, {}, "who: one line"),
        ("view", {**COMMON, "schema": {"name": "edgewatch.order.view", "version": 2}}, {}, "schema"),
        ("teach", {**COMMON, "grade": "../../etc/passwd", "bars": 3}, {}, "grade: a grade name"),
        ("teach", {**COMMON, "grade": "", "bars": 3}, {}, "grade: a grade name"),
        ("teach", {**COMMON, "grade": "C45", "bars": 2.5}, {}, "bars: a whole number"),
        ("expect", {**COMMON, "grade": "C45", "wheel_surface_speed_m_s": 1e400}, {}, "Infinity is not JSON"),
        ("expect", b'{"grade":"C45","wheel_surface_speed_m_s":1e999}', {}, "a number above 0"),
        ("acknowledge", {**COMMON, "alert": ""}, {}, "alert: one line of 1"),
        ("view", {**COMMON}, {"response_topic": "a/#"}, "response topic"),
        ("view", {**COMMON}, {"response_topic": TOPICS.order("release")}, "response topic"),
    ],
)
def test_a_wrong_order_is_refused_with_its_reason(name: str, payload: Any, options: dict[str, Any], reason: str):
    """Each way of being wrong, named; the answer is a valid message."""
    found = _read(name, payload, **options)
    assert isinstance(found, Refusal)
    assert reason in found.reason
    body = messages.finish("order", answer(found), Stamp(boot="b", monotonic_s=0, utc_s=0, synced=True), seq=1)
    validator("reply").validate(body)
    assert body["accepted"] is False


def test_what_is_no_order_is_none():
    """Other topics are somebody else's."""
    assert read_order("elsewhere", b"{}", topics=TOPICS) is None


@pytest.mark.parametrize("name", ORDERS)
@settings(max_examples=120, deadline=None)
@given(data=st.data())
def test_the_reader_and_the_schema_agree(name: str, data: st.DataObject):
    """The reader takes exactly what the shipped schema takes."""
    content = data.draw(order_contents(name) | junk)
    payload = json.dumps(content).encode()
    found = read_order(TOPICS.order(name), payload, topics=TOPICS, most_bytes=10**6)
    assert isinstance(found, Order) == validator(name=f"order.{name}").is_valid(json.loads(payload)), found


@given(st.text(max_size=12) | st.sampled_from(sorted(ORDERS)), st.binary(max_size=200), st.text(max_size=20))
def test_any_bytes_give_an_order_or_a_refusal(name: str, payload: bytes, response_topic: str):
    """Never an exception; the refusal can be answered."""
    found = read_order(f"{TOPICS.base}/order/{name}", payload, topics=TOPICS, response_topic=response_topic)
    assert isinstance(found, (Order, Refusal))
    messages.encode(messages.plain(answer(found)))


# ---------------------------------------------------------------------- the gate


def _order(number: int, sent_utc_s: float = 1000.0) -> Order:
    return Order(name="view", id=f"n{number}", sent_utc_s=sent_utc_s, who="x", reply_topic="a", correlation=b"c")


def test_an_order_passes_once():
    """A repeat is refused and still answered where the sender wants it."""
    gate = OrderGate()
    assert gate.admit(_order(1), utc_s=1000, monotonic_s=0) == _order(1)
    again = gate.admit(_order(1), utc_s=1001, monotonic_s=1)
    assert isinstance(again, Refusal)
    assert "duplicate" in again.reason
    assert (again.reply_topic, again.correlation, again.quiet) == ("a", b"c", False)


@pytest.mark.parametrize(("age_s", "word"), [(61, "too old"), (-61, "future"), (math.inf, "too old")])
def test_an_order_from_another_time_is_refused(age_s: float, word: str):
    """Too old, or sent by a clock that is ahead."""
    found = OrderGate(oldest_s=60).admit(_order(1, 1000), utc_s=1000 + age_s, monotonic_s=0)
    assert isinstance(found, Refusal)
    assert word in found.reason


def test_a_repeat_never_passes_while_its_age_would_allow_it():
    """Sent by a clock that is ahead, repeated when this one has caught up."""
    gate = OrderGate(oldest_s=60)
    assert isinstance(gate.admit(_order(1, 1059), utc_s=1000, monotonic_s=0), Order)
    for second in range(1, 200):
        assert isinstance(gate.admit(_order(1, 1059), utc_s=1000 + second, monotonic_s=second), Refusal)
    assert gate.remembered() == ()


def test_the_rate_holds_in_any_minute_and_comes_back():
    """The sixty-first order in a minute is refused, the first after it passes."""
    gate = OrderGate(most_per_minute=3, oldest_s=1e6)
    passed = [
        isinstance(gate.admit(_order(second), utc_s=1000, monotonic_s=second), Order) for second in range(0, 130, 10)
    ]
    assert passed == [True] * 3 + [False] * 3 + [True] * 3 + [False] * 3 + [True]


def test_a_flood_of_junk_is_quiet_and_does_not_keep_good_orders_out():
    """Refusals are recorded at the same rate at most."""
    gate = OrderGate(most_per_minute=5)
    junk_order = Refusal(name="view", reason="malformed")
    refused = [gate.admit(junk_order, utc_s=1000, monotonic_s=0) for _ in range(100)]
    assert [found.quiet for found in refused if isinstance(found, Refusal)] == [False] * 5 + [True] * 95
    assert isinstance(gate.admit(_order(1), utc_s=1000, monotonic_s=1), Order)


def test_what_was_taken_is_remembered_over_a_restart():
    """Identifiers handed to the next gate do not pass there."""
    first = OrderGate()
    first.admit(_order(1), utc_s=1000, monotonic_s=500)
    second = OrderGate(seen=first.remembered(), monotonic_s=3)
    assert isinstance(second.admit(_order(1), utc_s=1001, monotonic_s=4), Refusal)
    assert isinstance(second.admit(_order(2), utc_s=1001, monotonic_s=4), Order)


def test_memory_of_the_gate_is_bounded_and_forgets_nothing_early():
    """With the memory full, orders are refused rather than old identifiers forgotten."""
    gate = OrderGate(seen=(str(number) for number in range(MOST_REMEMBERED)))
    found = gate.admit(_order(1), utc_s=1000, monotonic_s=0)
    assert isinstance(found, Refusal)
    assert "rate" in found.reason
    assert isinstance(gate.admit(_order(1), utc_s=1000, monotonic_s=1000), Order)


def test_an_answer_says_what_the_station_says():
    """The station may refuse a well-formed order, and never accept a refused one."""
    assert answer(_order(1))["accepted"] is True
    assert answer(_order(1), accepted=False, reason="no band of that grade")["reason"] == "no band of that grade"
    assert answer(Refusal(name="view", reason="retained"), accepted=True)["accepted"] is False
