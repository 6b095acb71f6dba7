"""Moment: when an examination took place, with exactly the precision that was written.

Source: FHIR R4 dateTime (a time of day needs a zone; dates may be partial).
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from datetime import date, datetime
from typing import Final

_DATE: Final = re.compile(r"([0-9]{4})(?:-([0-9]{2})(?:-([0-9]{2}))?)?", re.ASCII)
_CLOCK: Final = re.compile(
    r"([0-9]{4}-[0-9]{2}-[0-9]{2})[T ]([0-9]{2}:[0-9]{2})(?::([0-9]{2})(\.[0-9]{1,9})?)?"
    r" ?(Z|[+-][0-9]{2}:?[0-9]{2})?",
    re.ASCII,
)


@dataclass(frozen=True, slots=True)
class Moment:
    """A FHIR dateTime, or a period between two when `end` is given."""

    start: str
    end: str = ""

    @property
    def precise_to_day(self) -> bool:
        """True when the start names a day."""
        return len(self.start) >= 10

    @property
    def has_clock(self) -> bool:
        """True when the start names a time of day."""
        return len(self.start) > 10

    def after(self, other: Moment) -> bool:
        """True when this starts later than `other` ends, as far as the coarser of the two tells."""
        end = other.end or other.start
        if self.has_clock and len(end) > 10:
            return datetime.fromisoformat(self.start) > datetime.fromisoformat(end)
        shared = min(len(self.start), len(end), 10)
        return self.start[:shared] > end[:shared]


def parse(text: str, *, zone: str = "") -> Moment | str:
    """The moment written as `text`, or a sentence that says why it is none.

    `zone` (such as `+01:00`, or `Z`) is used where a time of day comes without one.
    """
    text = text.strip()
    if plain := _DATE.fullmatch(text):
        year, month, day = plain.groups()
        return Moment(text) if _real_date(year, month, day) else "there is no such day in the calendar"
    clock = _CLOCK.fullmatch(text)
    if not clock:
        return "it is not an ISO 8601 date or time such as 2026-03-14T09:30:00+01:00"
    day, minute, second, fraction, own_zone = clock.groups()
    used = own_zone or zone
    if not used:
        return "a time of day needs a zone such as +01:00; send it, or name the zone in the map"
    if used != "Z" and ":" not in used:
        used = f"{used[:3]}:{used[3:]}"
    moment = f"{day}T{minute}:{second or '00'}{fraction or ''}{used}"
    try:
        datetime.fromisoformat(moment)
    except ValueError:
        return "there is no such time in the calendar"
    return Moment(moment)


def _real_date(year: str, month: str | None, day: str | None) -> bool:
    try:
        date(int(year), int(month or 1), int(day or 1))
    except ValueError:
        return False
    return True
