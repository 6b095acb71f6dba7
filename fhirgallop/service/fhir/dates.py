"""A FHIR date or time as the first and the last moment it may mean, in ms since 1970.

Source: FHIR R4 search, "date": a date means the whole interval that its precision leaves open. A date without
a zone is taken in UTC.
"""

from __future__ import annotations

import calendar
import re
from collections.abc import Mapping
from datetime import UTC, datetime, timedelta
from typing import Any, Final

Interval = tuple[int, int]

OPEN_START: Final = -(1 << 50)  # before the year 1: a period without a start
OPEN_END: Final = 1 << 50  # after the year 9999: a period without an end
_EPOCH: Final = datetime(1970, 1, 1, tzinfo=UTC)
_MS: Final = timedelta(milliseconds=1)
_WRITTEN: Final = re.compile(
    r"(\d{4})(?:-(\d\d)(?:-(\d\d)(?:T(\d\d):(\d\d)(?::(\d\d)(?:\.(\d{1,9}))?)?(Z|[+-]\d\d:\d\d)?)?)?)?",
    re.ASCII,
)


def interval(text: str) -> Interval | None:
    """The moments that `text` may mean; None when it is no date or time of the calendar."""
    found = _WRITTEN.fullmatch(text)
    if found is None:
        return None
    year, month, day, hour, minute, second, fraction, zone = found.groups()
    try:
        if hour is None:
            return _days(int(year), month, day)
        leap = second == "60"  # a leap second is the end of its minute here
        moment = datetime.fromisoformat(
            f"{year}-{month}-{day}T{hour}:{minute}:{'59' if leap else second or '00'}"
            f"{zone.replace('Z', '+00:00') if zone else '+00:00'}"
        )
        start = ms(moment)
    except (ValueError, OverflowError):
        return None
    if fraction is not None:
        digits = fraction[:3]
        width = 10 ** (3 - len(digits))
        start += int(digits) * width
        return start, start + width - 1
    return start, start + (999 if second is not None else 59_999)


def of_element(resource: Mapping[str, Any]) -> Interval | None:
    """When a resource took place: effective[x] of an Observation or report, `recorded` of a Provenance."""
    for name in ("effectiveDateTime", "effectiveInstant", "recorded"):
        written = resource.get(name)
        if isinstance(written, str):
            return interval(written)
    period = resource.get("effectivePeriod")
    if not isinstance(period, Mapping):
        return None
    start, end = period.get("start"), period.get("end")
    first = interval(start) if isinstance(start, str) else (OPEN_START, OPEN_START)
    last = interval(end) if isinstance(end, str) else (OPEN_END, OPEN_END)
    return (first[0], last[1]) if first and last else None


def ms(moment: datetime) -> int:
    """A moment in ms since 1970."""
    return (moment - _EPOCH) // _MS


def http_date(at: int) -> str:
    """A moment as HTTP writes it (RFC 9110, 5.6.7)."""
    return (_EPOCH + at * _MS).strftime("%a, %d %b %Y %H:%M:%S GMT")


def instant(at: int) -> str:
    """A moment as a FHIR instant, to the millisecond."""
    return (_EPOCH + at * _MS).isoformat(timespec="milliseconds").replace("+00:00", "Z")


def _days(year: int, month: str | None, day: str | None) -> Interval:
    first = datetime(year, int(month or 1), int(day or 1), tzinfo=UTC)
    last_month = int(month or 12)
    last_day = int(day or calendar.monthrange(year, last_month)[1])
    last = datetime(year, last_month, last_day, 23, 59, 59, 999_000, tzinfo=UTC)
    return ms(first), ms(last)
