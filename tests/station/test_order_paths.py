"""No order leads out of the folders that the configuration names: what it can put into a file's name is checked."""

from __future__ import annotations

import json
import re
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from edgewatch.settings import StationSettings
from edgewatch.wire.orders import ORDERS, Order, read_order
from edgewatch.wire.topics import Topics

TOPICS = Topics.of(StationSettings(site="hollowmere", line="peel-2", name="wheel-a"))
PATHS = st.sampled_from(
    ["..", "../x", "/etc/passwd", "a/b", "a/../../b", "~", ".ssh", "a\0b", "C:\\x", "//host/x", "C45/../../x", "C45\n"]
) | st.text(st.sampled_from("./\\~C45-_ +\0\n"), max_size=12)
FOLDER = Path("/srv/station/bands")


@pytest.mark.parametrize("name", ORDERS)
@given(data=st.data())
def test_a_grade_is_one_file_name(name: str, data: st.DataObject) -> None:
    """Whatever text stands in whichever field, the order is refused, or its grade names a file in the bands' folder."""
    needed, may = ORDERS[name]
    content = {"id": "desk-1", "sent": "2026-03-01T06:00:00Z", "who": "shift lead"}
    content |= {key: data.draw(PATHS, label=key) for key in (*needed, *may)}
    if "bars" in content:
        content["bars"] = 3  # type: ignore[assignment]
    content.pop("verify", None)
    content.pop("wheel_surface_speed_m_s", None)
    found = read_order(TOPICS.order(name), json.dumps(content).encode(), topics=TOPICS)
    if not isinstance(found, Order) or not found.grade:
        return
    path = FOLDER / f"{found.grade}.toml"
    assert path.resolve().parent == FOLDER
    assert re.fullmatch(r"[^/\0]+\.toml", path.name)
    assert not path.name.startswith(".")


def test_only_the_grade_becomes_a_file_name() -> None:
    """The station builds paths from settings and from a band's grade: no other field of an order is near a path."""
    fields = {field for needed, may in ORDERS.values() for field in (*needed, *may)}
    assert fields == {"grade", "heat", "order_number", "wheel_surface_speed_m_s", "alert", "reason", "bars", "verify"}
    source = (Path(__file__).parents[2] / "edgewatch" / "station" / "station.py").read_text(encoding="utf-8")
    built = re.findall(r"folder / ([^,\n]+)", source)
    assert built
    for part in built:
        assert re.match(r"(self\._)?settings\.[a-z_.]+|(self\._settings)|f\"\{effect\.band\.grade\}\.toml\"", part), (
            part
        )
