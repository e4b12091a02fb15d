"""The shipped JSON Schemas as validators, with their formats checked."""

from __future__ import annotations

import json
from functools import cache
from importlib import resources
from typing import Any

import jsonschema

from edgewatch.wire.kinds import KINDS


@cache
def schema(name: str) -> dict[str, Any]:
    """Return the schema file ``name``.json out of the package."""
    text = (resources.files("edgewatch.wire") / "schemas" / f"{name}.json").read_text(encoding="utf-8")
    found = json.loads(text)
    assert isinstance(found, dict)
    return found


@cache
def validator(name: str) -> jsonschema.Draft202012Validator:
    """Return a validator for the schema file ``name``.json."""
    return jsonschema.Draft202012Validator(schema(name), format_checker=jsonschema.Draft202012Validator.FORMAT_CHECKER)


def check_message(topic: str, payload: dict[str, Any]) -> None:
    """Validate a message that came in on ``topic`` with the schema of its kind."""
    leaf = topic.rsplit("/", 1)[-1]
    assert leaf in {kind.leaf for kind in KINDS.values()}, topic
    validator(leaf).validate(payload)
