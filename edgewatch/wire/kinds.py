"""Every message that the station publishes: its topic, QoS, whether retained, whether journalled. One table.

``orders`` lie in ``edgewatch.wire.orders``; topics are made by ``edgewatch.wire.topics``.
"""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True, slots=True, kw_only=True)
class Kind:
    """One kind of message. ``leaf``: last topic level; ``schema``: name in the payload's ``schema`` key and of the
    file in ``edgewatch/wire/schemas``; ``journalled``: it is a record with a ``seq`` and goes through the outbox.
    """

    leaf: str
    schema: str
    qos: int
    retained: bool
    journalled: bool
    says: str
    version: int = 1


def _kind(leaf: str, qos: int, says: str, *, retained: bool = False, journalled: bool = False) -> Kind:
    return Kind(leaf=leaf, schema=f"edgewatch.{leaf}", qos=qos, retained=retained, journalled=journalled, says=says)


KINDS: dict[str, Kind] = {
    "presence": _kind("presence", 1, "online or offline, version, since; also the will", retained=True),
    "condition": _kind("condition", 1, "condition and causes", retained=True, journalled=True),
    "expected": _kind("expected", 1, "grade, heat, order number in force, who set it", retained=True, journalled=True),
    "window": _kind("window", 0, "figures of one window (at QoS 1 when sent late, after an outage)", journalled=True),
    "summary": _kind(
        "summary", 1, "rolling figures, bands, counts of bars by verdict since the order began", retained=True
    ),
    "bar": _kind("bar", 1, "verdict and figures of one bar", journalled=True),
    "alert": _kind("alert", 1, "an alert raised, acknowledged or cleared", journalled=True),
    "relay": _kind("relay", 1, "a switch of the relay, its reason and read-back", retained=True, journalled=True),
    "thinned": _kind("thinned", 1, "window messages that gave way while the broker was away", journalled=True),
    "order": _kind("reply", 1, "an order, and the answer to it", journalled=True),
    "view": _kind("view", 0, "annotated JPEG, on request"),
}
"""Kind -> how it travels. The record kind ``order`` is published on ``reply``."""

JOURNALLED = tuple(name for name, kind in KINDS.items() if kind.journalled)
STATES = tuple(name for name, kind in KINDS.items() if kind.journalled and kind.retained)
"""Journalled kinds of which the newest is the state in force: sent anew (without ``seq``) after each reconnect."""
