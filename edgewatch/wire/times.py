"""RFC 3339 times (July 2002, section 5.6) <-> seconds since 1970-01-01 UTC."""

from __future__ import annotations

import calendar
import math
import re
from datetime import datetime, timedelta, timezone

_RFC3339 = re.compile(
    r"([0-9]{4})-([0-9]{2})-([0-9]{2})[Tt]([0-9]{2}):([0-9]{2}):([0-9]{2})(\.[0-9]{1,12})?"
    r"(?:[Zz]|([+-])([0-9]{2}):([0-9]{2}))"
)
_EPOCH = datetime(1970, 1, 1, tzinfo=timezone.utc)
_FIRST_S, _LAST_S = -62135596800.0, 253402300799.0
"""Years 0001 to 9999, what the format and the calendar share."""


def write_time(utc_s: float) -> str:
    """Return ``utc_s`` (seconds since 1970 UTC) as RFC 3339 with milliseconds, such as ``2026-03-01T06:00:00.250Z``.

    Raises ``ValueError`` outside the years 1 to 9999 or when not finite.
    """
    if not (math.isfinite(utc_s) and _FIRST_S <= utc_s <= _LAST_S):
        raise ValueError(f"utc_s = {utc_s!r}: a time within the years 1 to 9999 is needed")
    whole_ms = min(math.floor(utc_s * 1000 + 0.5), int(_LAST_S) * 1000 + 999)
    seconds, ms = divmod(whole_ms, 1000)
    t = _EPOCH + timedelta(seconds=seconds)
    return f"{t.year:04d}-{t.month:02d}-{t.day:02d}T{t.hour:02d}:{t.minute:02d}:{t.second:02d}.{ms:03d}Z"


def read_time(text: str) -> float:
    """Return seconds since 1970 UTC of an RFC 3339 ``text``; its leap second 23:59:60 is the second after 23:59:59.

    Raises ``ValueError``: not RFC 3339, a day the calendar does not have, no offset from UTC, a leap second elsewhere.
    """
    match = _RFC3339.fullmatch(text)
    if match is None:
        raise ValueError(f"{text[:40]!r}: an RFC 3339 time such as 2026-03-01T06:00:00Z is needed")
    year, month, day, hour, minute, second = (int(part) for part in match.groups()[:6])
    offset_s = 0
    if match[8]:
        if int(match[9]) > 23 or int(match[10]) > 59:
            raise ValueError(f"{text[:40]!r}: the offset from UTC is not one")
        offset_s = (int(match[9]) * 3600 + int(match[10]) * 60) * (-1 if match[8] == "-" else 1)
    if not (year >= 1 and 1 <= month <= 12 and 1 <= day <= calendar.monthrange(year, month)[1]):
        raise ValueError(f"{text[:40]!r}: no such day")
    if not (hour <= 23 and minute <= 59 and second <= 60):
        raise ValueError(f"{text[:40]!r}: no such time of day")
    utc_s = calendar.timegm((year, month, day, hour, minute, second, 0, 1, 0)) - offset_s
    if second == 60 and utc_s % 86400 != 0:
        raise ValueError(f"{text[:40]!r}: no leap second can lie there")
    return utc_s + float(match[7] or 0)
