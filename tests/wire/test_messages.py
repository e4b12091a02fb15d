"""Message bodies, payloads and their schemas."""

from __future__ import annotations

import dataclasses
import json
import math
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from edgewatch.figures.values import Figures
from edgewatch.wire import messages
from edgewatch.wire.kinds import KINDS, STATES
from edgewatch.wire.messages import Stamp
from tests.wire.schemas import schema, validator
from tests.wire.strategies import bodies, stamps

STAMP = Stamp(boot="b", monotonic_s=1.0, utc_s=0.0, synced=True)


@pytest.mark.parametrize("kind", KINDS)
def test_every_schema_is_one_and_is_strict(kind: str):
    """Each is a valid JSON Schema 2020-12, names kind and version, and allows no further key at any depth."""
    found = schema(KINDS[kind].leaf)
    type(validator(KINDS[kind].leaf)).check_schema(found)
    named = found["properties"]["schema"]["properties"]
    assert (named["name"]["const"], named["version"]["const"]) == (KINDS[kind].schema, KINDS[kind].version)
    assert ("seq" in found["properties"]) == KINDS[kind].journalled
    for part in _objects(found):
        assert part.get("additionalProperties") is False or "propertyNames" in part


def _objects(part: Any) -> list[dict[str, Any]]:
    if isinstance(part, dict):
        below = [found for value in part.values() for found in _objects(value)]
        return [part, *below] if "properties" in part and part.get("type") == "object" else below
    return [found for value in part for found in _objects(value)] if isinstance(part, list) else []


@pytest.mark.parametrize("kind", KINDS)
@settings(max_examples=25, deadline=None)
@given(data=st.data())
def test_every_message_obeys_its_schema_and_holds_no_nan(kind: str, data: st.DataObject):
    """Whatever the values: strict JSON in UTF-8, valid, with NaN as null."""
    body, stamp = data.draw(bodies[kind]), data.draw(stamps)
    payload = messages.finish(kind, body, stamp, seq=7 if KINDS[kind].journalled else None)
    raw = messages.encode(payload)
    read = json.loads(raw.decode("utf-8"), parse_constant=pytest.fail)
    validator(KINDS[kind].leaf).validate(read)
    assert next(iter(read)) == "schema"
    if kind in STATES:
        again = messages.repeated(read)
        validator(KINDS[kind].leaf).validate(again)
        assert again["repeat_of_seq"] == 7
        assert "seq" not in again


@pytest.mark.parametrize("kind", KINDS)
@settings(max_examples=8, deadline=None)
@given(data=st.data())
def test_a_schema_refuses_what_lacks_a_key_or_has_one_too_many(kind: str, data: st.DataObject):
    """The schemas can fail: any key left out, any key added."""
    payload = messages.finish(kind, data.draw(bodies[kind]), STAMP, seq=7 if KINDS[kind].journalled else None)
    check = validator(KINDS[kind].leaf)
    assert check.is_valid(payload)
    left_out = data.draw(st.sampled_from(sorted(payload)))
    assert not check.is_valid({key: value for key, value in payload.items() if key != left_out})
    assert not check.is_valid({**payload, "surplus": 1})


def test_a_window_carries_every_figure_under_its_own_name():
    """Contract names are the field names of the figures."""
    body = messages.window(values=_figures(), bar=None)
    names = {part.name for part in dataclasses.fields(Figures)}
    assert set(body) == names | {"bar"}


def _figures() -> Figures:
    values: dict[str, Any] = {part.name: 1.0 for part in dataclasses.fields(Figures)}
    return Figures(**{**values, "frames_seen": 1, "frames_skipped": 0, "streaks": 1, "bursts": 1})


@pytest.mark.parametrize(
    "wrong",
    [
        lambda: messages.condition(condition="fine"),
        lambda: messages.alert(alert="a", state="gone", text=""),
        lambda: messages.bar(bar=1, expected="", verdict="good", values=_figures()),
        lambda: messages.relay(wanted="off", energised=True, read_back="run", reason="", latched=False),
        lambda: messages.finish("weather", {}, STAMP),
    ],
)
def test_words_outside_the_standards_are_refused(wrong: Any):
    """A verdict, condition or state that does not exist is our own mistake."""
    with pytest.raises(ValueError, match=r"is needed|known are"):
        wrong()


def test_plain_values():
    """numpy scalars become Python's; what JSON has no form for is refused; not finite is null."""
    given_values = {"a": np.float32(0.5), "b": np.int64(3), "c": [math.nan, math.inf], "d": np.bool_(True), "e": None}
    assert messages.plain(given_values) == {"a": 0.5, "b": 3, "c": [None, None], "d": True, "e": None}
    for value in (np.zeros(2), {1, 2}, b"x", object()):
        with pytest.raises(ValueError, match="no form in JSON"):
            messages.plain(value)
    with pytest.raises(ValueError, match="JSON"):
        messages.encode({"a": math.nan})


def test_lone_surrogates_never_reach_the_wire():
    """A broken text from elsewhere still makes valid UTF-8."""
    assert messages.encode({"a": "x\ud800y"}) == b'{"a":"x?y"}'
