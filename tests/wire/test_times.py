"""RFC 3339 times."""

from __future__ import annotations

import contextlib
import datetime as dt
import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from edgewatch.wire.times import read_time, write_time


@given(st.datetimes(timezones=st.just(dt.timezone.utc)))
def test_what_is_written_is_read_back_to_the_millisecond(moment: dt.datetime):
    """The standard library agrees with both directions over all years."""
    utc_s = moment.timestamp()
    text = write_time(utc_s)
    assert abs(read_time(text) - utc_s) <= 0.000_6
    if moment.year < 9999:
        rounded = dt.datetime.fromisoformat(text.replace("Z", "+00:00"))
        assert abs((rounded - moment).total_seconds()) <= 0.000_6


def test_rounding_carries_over():
    """59.9996 s is the next minute, never second 60."""
    assert write_time(59.9996) == "1970-01-01T00:01:00.000Z"


@pytest.mark.parametrize(
    "text",
    [
        "2026-03-01",
        "2026-03-01 06:00:00Z",
        "2026-03-01T06:00:00",
        "2026-03-01T06:00:00+0100",
        "2026-02-29T06:00:00Z",
        "2026-13-01T06:00:00Z",
        "2026-03-01T24:00:00Z",
        "2026-03-01T06:60:00Z",
        "2026-03-01T06:00:60Z",
        "2026-03-01T06:00:00+24:00",
        "0000-03-01T06:00:00Z",
        "2026-03-01T06:00:00Z\n",
        "２０２６-03-01T06:00:00Z",
        "",
    ],
)
def test_what_is_no_rfc_3339_time_is_refused(text: str):
    """Section 5.6, and days and leap seconds that the calendar does not have."""
    with pytest.raises(ValueError, match=r"2026|0000|２|''"):
        read_time(text)


@pytest.mark.parametrize("utc_s", [math.nan, math.inf, -math.inf, 1e12, -1e12])
def test_a_time_outside_the_calendar_is_refused(utc_s: float):
    """Only the years 1 to 9999 have a form."""
    with pytest.raises(ValueError, match="utc_s"):
        write_time(utc_s)


@given(st.text(max_size=40))
def test_any_text_gives_a_time_or_a_value_error(text: str):
    """No other exception."""
    with contextlib.suppress(ValueError):
        assert math.isfinite(read_time(text))
