"""The examples of RFC 3339 (Klyne and Newman, July 2002), section 5.8. Values from memory, checked for consistency:
each pair below is stated by the section to be the same moment or is computed with the standard library.
"""

from __future__ import annotations

import datetime as dt

from edgewatch.wire.times import read_time


def _utc_s(*parts: int) -> float:
    return dt.datetime(*parts, tzinfo=dt.timezone.utc).timestamp()


def test_examples_of_section_5_8():
    """Fraction, offset, leap second, a historical offset of minutes."""
    assert read_time("1985-04-12T23:20:50.52Z") == _utc_s(1985, 4, 12, 23, 20, 50) + 0.52
    assert read_time("1996-12-19T16:39:57-08:00") == read_time("1996-12-20T00:39:57Z")
    assert read_time("1990-12-31T23:59:60Z") == _utc_s(1991, 1, 1)
    assert read_time("1990-12-31T15:59:60-08:00") == read_time("1990-12-31T23:59:60Z")
    assert read_time("1937-01-01T12:00:27.87+00:20") == _utc_s(1937, 1, 1, 11, 40, 27) + 0.87
