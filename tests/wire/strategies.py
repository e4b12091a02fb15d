"""Hypothesis strategies for what goes over the wire."""

from __future__ import annotations

import math
from typing import Any

from hypothesis import strategies as st

from edgewatch.figures.values import Figures
from edgewatch.wire import messages
from edgewatch.wire.messages import Body, Stamp

numbers = st.floats(allow_nan=True, allow_infinity=True)
amounts = st.floats(min_value=0, max_value=1e9) | st.just(math.nan)
counts = st.integers(0, 2**40)
texts = st.text(max_size=40)
stamps = st.builds(
    Stamp,
    boot=st.uuids().map(str),
    monotonic_s=st.floats(0, 1e8),
    utc_s=st.floats(-6e10, 2e11),
    synced=st.booleans(),
)
figures = st.builds(
    Figures,
    begin_s=st.floats(-1e9, 1e9),
    end_s=st.floats(-1e9, 1e9),
    frames_seen=counts,
    frames_skipped=counts,
    streaks=counts,
    bursts=counts,
    bursts_listed=counts,
    track_m=amounts,
    exposure_m=amounts,
    burst_rate_per_m=amounts,
    burst_rate_low_per_m=amounts,
    burst_rate_high_per_m=amounts | st.just(math.inf),
    reach_mm=numbers,
    reach_low_mm=numbers,
    reach_high_mm=numbers,
    cut_share=numbers,
    reach_truncated=st.booleans(),
    streaks_per_frame=amounts,
    spark_speed_m_s=amounts,
    streak_peak_dn=amounts,
    streak_width_px=amounts,
)
bands = st.builds(
    messages.band,
    grade=texts,
    burst_rate_low_per_m=numbers,
    burst_rate_high_per_m=numbers,
    reach_low_mm=numbers,
    reach_high_mm=numbers,
)
causes = st.builds(messages.cause, cause=texts, condition=st.sampled_from(messages.CONDITIONS), detail=texts)
bar_numbers = st.none() | counts
details = st.dictionaries(st.from_regex(r"[a-z][a-z0-9_]{0,10}", fullmatch=True), numbers | texts | st.booleans())

bodies: dict[str, st.SearchStrategy[Body]] = {
    "presence": st.builds(
        messages.presence,
        online=st.booleans(),
        version=texts,
        since_utc_s=st.floats(0, 1e11) | st.just(math.nan),
        reason=st.sampled_from(["", "stopped", "lost"]),
    ),
    "condition": st.builds(
        messages.condition, condition=st.sampled_from(messages.CONDITIONS), causes=st.lists(causes, max_size=3)
    ),
    "expected": st.builds(
        messages.expected, grade=texts, heat=texts, order_number=texts, who=texts, wheel_surface_speed_m_s=amounts
    ),
    "window": st.builds(messages.window, values=figures, bar=bar_numbers),
    "summary": st.builds(
        messages.summary,
        condition=st.sampled_from(messages.CONDITIONS),
        expected=texts,
        since_utc_s=st.floats(0, 1e11) | st.just(math.nan),
        conforming=counts,
        nonconforming=counts,
        inconclusive=counts,
        values=st.none() | figures,
        bands=st.lists(bands, max_size=3),
        frames_seen=counts,
        frames_skipped=counts,
        unsent=counts,
        windows_thinned=counts,
        relay=st.sampled_from(["", "run", "stop"]),
        alerts=st.lists(texts, max_size=3),
        extra=st.none() | details,
    ),
    "bar": st.builds(
        messages.bar,
        bar=counts,
        expected=texts,
        verdict=st.sampled_from(messages.VERDICTS),
        values=figures,
        decided_after_s=amounts,
        causes=st.lists(texts, max_size=3),
        nearest=st.lists(st.tuples(texts, numbers), max_size=3),
        heat=texts,
        order_number=texts,
        band=st.none() | bands,
        pictures=st.lists(texts, max_size=3),
        extra=st.none() | details,
    ),
    "alert": st.builds(
        messages.alert,
        alert=st.text(min_size=1, max_size=40),
        state=st.sampled_from(messages.ALERT_STATES),
        text=texts,
        latched=st.booleans(),
        bar=bar_numbers,
        who=texts,
    ),
    "relay": st.builds(
        messages.relay,
        wanted=st.sampled_from(["run", "stop"]),
        energised=st.booleans(),
        read_back=st.sampled_from(["run", "stop", "unknown"]),
        reason=texts,
        latched=st.booleans(),
        bar=bar_numbers,
        who=texts,
    ),
    "thinned": st.builds(
        messages.thinned,
        count=st.integers(1, 1000),
        first_seq=st.integers(1, 2**40),
        last_seq=st.integers(1, 2**40),
        keep_every=st.integers(1, 2**20),
        total=st.integers(1, 2**40),
    ),
    "order": st.builds(
        messages.reply,
        order=texts,
        accepted=st.booleans(),
        reason=texts,
        order_id=texts,
        who=texts,
        sent_utc_s=st.floats(0, 1e11) | st.just(math.nan),
        request=st.none() | st.fixed_dictionaries({}, optional={"grade": texts, "bars": st.integers(1, 9)}),
    ),
    "view": st.builds(
        messages.view,
        jpeg=st.binary(min_size=1, max_size=60),
        width_px=st.integers(1, 9999),
        height_px=st.integers(1, 9999),
        frame=counts,
        request=texts,
    ),
}
"""A strategy for the body of every kind."""

# -- orders: mostly right, with every part sometimes wrong

_times = st.datetimes().map(lambda t: t.isoformat() + "Z") | st.sampled_from(
    ["2026-03-01T06:00:00Z", "2026-02-30T06:00:00Z", "2026-03-01 06:00:00Z", "2026-03-01t06:00:00.5+01:00", "x", ""]
)
_lines = st.text(max_size=12) | st.sampled_from(["", "x" * 128, "x" * 129, "two\nlines", "end\n"])
_grades = st.from_regex(r"[A-Za-z0-9][A-Za-z0-9._+-]{0,5}", fullmatch=True) | st.sampled_from(["", "../C45", "C45\n"])
junk: st.SearchStrategy[Any] = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats(allow_nan=False, allow_infinity=False) | st.text(max_size=8),
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.text(max_size=8), inner, max_size=3),
    max_leaves=6,
)
_values: dict[str, st.SearchStrategy[Any]] = {
    "id": st.from_regex(r"[A-Za-z0-9._:-]{1,10}", fullmatch=True) | _lines,
    "sent": _times,
    "who": _lines,
    "grade": _grades,
    "heat": _lines,
    "order_number": _lines,
    "wheel_surface_speed_m_s": st.floats(-1, 201) | st.sampled_from([0, 200, 35, True]),
    "alert": _lines,
    "verify": st.booleans() | st.sampled_from([0, 1, None, "true"]),
    "bars": st.integers(-1, 1001) | st.sampled_from([3.0, 2.5, True]),
    "reason": _lines,
}
_keys = ["id", "sent", "who"]
_order_keys = {
    "expect": ([*_keys, "grade"], ["heat", "order_number", "wheel_surface_speed_m_s"]),
    "acknowledge": ([*_keys, "alert"], []),
    "release": (_keys, ["reason"]),
    "view": (_keys, []),
    "teach": ([*_keys, "grade", "bars"], ["verify"]),
}


@st.composite
def order_contents(draw: st.DrawFn, name: str) -> Any:
    """The content of an order ``name``: often right, often nearly so."""
    needed, optional = _order_keys[name]
    content = {key: draw(_values[key]) for key in needed}
    for key in optional:
        if draw(st.booleans()):
            content[key] = draw(_values[key])
    if draw(st.booleans()):
        version = draw(st.sampled_from([1, 1, 1, 1.0, 2, True, "1"]))
        content["schema"] = {"name": f"edgewatch.order.{name}", "version": version}
    change = draw(st.sampled_from(["none", "none", "none", "drop", "spoil", "add"]))
    if change == "drop":
        del content[draw(st.sampled_from(sorted(content)))]
    elif change == "spoil":
        content[draw(st.sampled_from(sorted(content)))] = draw(junk)
    elif change == "add":
        content[draw(st.sampled_from(sorted(_values)) | st.text(max_size=8))] = draw(junk)
    return content
