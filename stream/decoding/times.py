"""A time as a message writes it comes in; milliseconds since 1970-01-01T00:00:00Z go out."""

from __future__ import annotations

import re
from datetime import date

__all__ = ["epoch_ms"]

RFC_3339 = re.compile(
    r"(\d{4}-\d\d-\d\d)[Tt ](\d\d):(\d\d):(\d\d)(?:\.(\d+))?(?:[Zz]|([+-])(\d\d):(\d\d))", re.ASCII
)
SECONDS_BELOW = 1e11
"""Numbers below are seconds (to the year 5138), others milliseconds (from March 1973)."""
EPOCH_DAY = date(1970, 1, 1).toordinal()


def epoch_ms(value: str | float | None) -> int | None:
    """RFC 3339 text (https://www.rfc-editor.org/rfc/rfc3339 section 5.6), or epoch seconds or milliseconds.

    Digits past the millisecond are dropped; a leap second counts as the second after it. Raises
    ValueError for anything else.
    """
    if value is None:
        return None
    if not isinstance(value, str):
        return round(value * 1000 if abs(value) < SECONDS_BELOW else value)
    found = RFC_3339.fullmatch(value)
    if found is None:
        raise ValueError("no RFC 3339 time")
    hour, minute, second = int(found[2]), int(found[3]), int(found[4])
    offset_hour, offset_minute = int(found[7] or 0), int(found[8] or 0)
    if hour > 23 or minute > 59 or second > 60 or offset_hour > 23 or offset_minute > 59:
        raise ValueError("no time of day")
    day = date.fromisoformat(found[1]).toordinal() - EPOCH_DAY
    offset = (offset_hour * 60 + offset_minute) * (-1 if found[6] == "-" else 1)
    minutes = (day * 24 + hour) * 60 + minute - offset
    return (minutes * 60 + second) * 1000 + int((found[5] or "0")[:3].ljust(3, "0"))
