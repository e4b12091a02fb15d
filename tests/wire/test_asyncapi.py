"""The AsyncAPI document says what the code does."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import yaml

from edgewatch.wire.kinds import KINDS
from edgewatch.wire.orders import ORDERS
from edgewatch.wire.topics import Topics

FILE = Path(__file__).parents[2] / "deploy" / "asyncapi.yaml"
DOCUMENT: dict[str, Any] = yaml.safe_load(FILE.read_text(encoding="utf-8"))
LEVELS = {"root": "a", "site": "b", "line": "c", "station": "d"}
TOPICS = Topics(base="a/b/c/d")


def _resolve(reference: dict[str, str]) -> Any:
    """Follow a reference within the document, or to a file beside it."""
    (target,) = reference.values()
    if not target.startswith("#/"):
        path = (FILE.parent / target).resolve()
        assert path.is_file(), target
        return path.name
    found: Any = DOCUMENT
    for key in target[2:].split("/"):
        found = found[key]
    return found


def _references(part: Any) -> list[dict[str, str]]:
    if isinstance(part, dict):
        own = [part] if "$ref" in part else []
        return own + [found for value in part.values() for found in _references(value)]
    return [found for value in part for found in _references(value)] if isinstance(part, list) else []


def test_the_document_has_what_asyncapi_3_requires():
    """Version, info, and the mandatory keys of each part; every reference leads somewhere."""
    assert DOCUMENT["asyncapi"].startswith("3.")
    assert {"title", "version"} <= DOCUMENT["info"].keys()
    assert all({"host", "protocol"} <= server.keys() for server in DOCUMENT["servers"].values())
    for operation in DOCUMENT["operations"].values():
        assert operation["action"] in ("send", "receive")
        channel = operation["channel"]["$ref"]
        assert all(message["$ref"].startswith(f"{channel}/messages/") for message in operation["messages"])
    for channel in DOCUMENT["channels"].values():
        named = {part[1:-1] for part in channel["address"].split("/") if part.startswith("{")}
        assert named == set(channel["parameters"]) == set(LEVELS)
    references = _references(DOCUMENT)
    assert len(references) > 50
    for reference in references:
        _resolve(reference)


def test_every_message_is_described_with_its_topic_qos_and_schema():
    """One operation a kind, and no other."""
    sent = [operation for operation in DOCUMENT["operations"].values() if operation["action"] == "send"]
    found = {}
    for operation in sent:
        channel = _resolve(operation["channel"])
        (message,) = channel["messages"].values()
        schema = _resolve(_resolve(message)["payload"]["schema"])
        found[channel["address"].format(**LEVELS)] = (operation["bindings"]["mqtt"], schema)
    assert found == {
        TOPICS.topic(name): ({"qos": kind.qos, "retain": kind.retained}, f"{kind.leaf}.json")
        for name, kind in KINDS.items()
    }


def test_every_order_is_described_with_its_topic_and_reply():
    """One operation an order, answered on reply."""
    received = [operation for operation in DOCUMENT["operations"].values() if operation["action"] == "receive"]
    found = {}
    for operation in received:
        channel = _resolve(operation["channel"])
        (message,) = channel["messages"].values()
        assert _resolve(operation["reply"]["channel"])["address"].endswith("/reply")
        found[channel["address"].format(**LEVELS)] = _resolve(_resolve(message)["payload"]["schema"])
    assert found == {TOPICS.order(name): f"order.{name}.json" for name in ORDERS}
