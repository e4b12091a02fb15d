"""Topics of one station."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from edgewatch.settings import StationSettings
from edgewatch.wire.kinds import JOURNALLED, KINDS, STATES
from edgewatch.wire.topics import Topics

TOPICS = Topics.of(StationSettings(site="hollowmere", line="peel-2", name="wheel-a"))

CONTRACT = {
    "presence": (1, True),
    "condition": (1, True),
    "expected": (1, True),
    "window": (0, False),
    "summary": (1, True),
    "bar": (1, False),
    "alert": (1, False),
    "view": (0, False),
    "reply": (1, False),
}
"""Topic -> QoS, retained, as the interface is promised."""


def test_every_promised_topic_has_its_qos_and_retained_flag():
    """The one table holds what is promised; what goes beyond it (relay, thinned) is at QoS 1."""
    found = {kind.leaf: (kind.qos, kind.retained) for kind in KINDS.values()}
    assert {leaf: found[leaf] for leaf in CONTRACT} == CONTRACT
    assert set(found) - set(CONTRACT) == {"relay", "thinned"}
    assert set(JOURNALLED) >= {"window", "bar", "alert", "condition", "expected", "order"}
    assert STATES == ("condition", "expected", "relay")


def test_topics_are_root_site_line_station_leaf():
    """Topics are made of the station's four names."""
    assert TOPICS.topic("bar") == "edgewatch/hollowmere/peel-2/wheel-a/bar"
    assert TOPICS.topic("order") == "edgewatch/hollowmere/peel-2/wheel-a/reply"
    assert TOPICS.order("expect") == "edgewatch/hollowmere/peel-2/wheel-a/order/expect"
    assert TOPICS.orders == "edgewatch/hollowmere/peel-2/wheel-a/order/#"


def test_an_unknown_kind_and_a_bad_base_are_refused():
    """Our own mistakes are ValueError."""
    with pytest.raises(ValueError, match="known are"):
        TOPICS.topic("weather")
    for base in ("a/b/c", "a/b/c/d/e", "a/b//d", "a/b/+/d", "a/b/c/#"):
        with pytest.raises(ValueError, match="four topic levels"):
            Topics(base=base)


def test_an_order_is_known_by_its_topic():
    """Only what lies below our own order topic is an order."""
    assert TOPICS.order_name("edgewatch/hollowmere/peel-2/wheel-a/order/view") == "view"
    assert TOPICS.order_name("edgewatch/hollowmere/peel-2/wheel-a/order/a/b") == "a/b"
    assert TOPICS.order_name("edgewatch/hollowmere/peel-2/wheel-b/order/view") is None
    assert TOPICS.order_name("edgewatch/hollowmere/peel-2/wheel-a/bar") is None


@pytest.mark.parametrize(
    ("topic", "allowed"),
    [
        ("desk/answers", True),
        ("edgewatch/hollowmere/peel-2/wheel-a/reply/desk", True),
        ("edgewatch/hollowmere/peel-2/wheel-a/bar", False),
        ("edgewatch/hollowmere/peel-2/wheel-a", False),
        ("edgewatch/hollowmere/peel-2/wheel-b/order/release", False),
        ("edgewatch/hollowmere/peel-2/wheel-b/order", False),
        ("$SYS/x", False),
        ("a/+", False),
        ("a/#", False),
        ("", False),
        ("x" * 65536, False),
    ],
)
def test_where_a_reply_may_go(topic: str, allowed: bool):
    """A response topic cannot make the station forge its own messages or give orders to another."""
    assert TOPICS.may_answer_on(topic) is allowed


@given(st.text(max_size=80))
def test_any_text_is_judged_without_an_error(topic: str):
    """Whatever the sender names as response topic, lone surrogates too."""
    assert TOPICS.may_answer_on(topic) in (True, False)
    TOPICS.order_name(topic)
