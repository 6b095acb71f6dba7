"""Date, dateTime and time with the precision they were written in.

Comparison follows FHIRPath N1 (v2.0.0), sections 6.1.1 and 6.2: part by part from the year on, time zones
brought to UTC first, seconds and milliseconds one part; it is undecided (None) where one side ends earlier.
A time zone on one side only is disregarded: the other side's zone is not known.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from datetime import date, timedelta
from decimal import Decimal

_MOMENT = re.compile(
    r"(?P<year>[0-9]{4})(?:-(?P<month>[0-9]{2})(?:-(?P<day>[0-9]{2}))?)?"
    r"(?P<timed>T(?:(?P<hour>[0-9]{2})(?::(?P<minute>[0-9]{2})(?::(?P<second>[0-9]{2}(?:\.[0-9]{1,30})?))?)?"
    r"(?P<zone>Z|[+-][0-9]{2}:[0-9]{2})?)?)?",
    re.ASCII,
)
_TIME = re.compile(r"([0-9]{2})(?::([0-9]{2})(?::([0-9]{2}(?:\.[0-9]{1,30})?))?)?", re.ASCII)
_MINUTES_A_DAY = 24 * 60
_DAY_PARTS = 3
_MINUTE_PARTS = 5
_LATEST_ZONE = 14 * 60

Part = int | Decimal


@dataclass(frozen=True, slots=True)
class Temporal:
    """A point in time as precise as it was written.

    Attributes:
        kind: "date", "dateTime" or "time".
        parts: year, month, day, hour, minute, second (a Decimal); of a time: hour, minute, second.
        zone: offset from UTC in minutes; None when none was written.
    """

    kind: str
    parts: tuple[Part, ...]
    zone: int | None = None

    @classmethod
    def parse(cls, text: str) -> Temporal | None:
        """A FHIR date, dateTime or instant; None when the text is none or names no day of the calendar."""
        match = _MOMENT.fullmatch(text)
        if match is None:
            return None
        whole = [match[name] for name in ("year", "month", "day", "hour", "minute")]
        parts: list[Part] = [int(part) for part in whole if part is not None]
        if match["second"] is not None:
            parts.append(Decimal(match["second"]))
        zone = _zone(match["zone"])
        if not _is_calendar(parts) or (zone is not None and abs(zone) > _LATEST_ZONE):
            return None
        return cls("dateTime" if match["timed"] else "date", tuple(parts), zone)

    @classmethod
    def parse_time(cls, text: str) -> Temporal | None:
        """A FHIR time; None when the text is none."""
        match = _TIME.fullmatch(text)
        if match is None:
            return None
        hour, minute, second = match.groups()
        parts: list[Part] = [int(part) for part in (hour, minute) if part is not None]
        if second is not None:
            parts.append(Decimal(second))
        return cls("time", tuple(parts)) if _is_clock(parts) else None

    def compare(self, other: Temporal) -> int | None:
        """-1, 0 or 1; None when the precision of one side leaves it open, or a time meets a date."""
        if (self.kind == "time") != (other.kind == "time"):
            return None
        mine, theirs = self.parts, other.parts
        if self.zone is not None and other.zone is not None:
            mine, theirs = self._utc(), other._utc()
        for a, b in zip(mine, theirs, strict=False):
            if a != b:
                return -1 if a < b else 1
        return 0 if len(mine) == len(theirs) else None

    def key(self) -> tuple[object, ...]:
        """Equal for two values that `compare` calls equal, to be used in sets."""
        return ("time" if self.kind == "time" else "moment", self.zone is not None, self._utc())

    def _utc(self) -> tuple[Part, ...]:
        """The parts at UTC; unchanged without a zone, or where the time of day is not given."""
        if not self.zone or len(self.parts) < _MINUTE_PARTS:
            return self.parts
        year, month, day, hour, minute = (int(part) for part in self.parts[:_MINUTE_PARTS])
        minutes = hour * 60 + minute - self.zone
        days, minutes = divmod(minutes, _MINUTES_A_DAY)
        try:
            moved = date(year, month, day) + timedelta(days=days)
        except (OverflowError, ValueError):  # the first or the last day of the calendar
            return self.parts
        return (moved.year, moved.month, moved.day, minutes // 60, minutes % 60, *self.parts[_MINUTE_PARTS:])

    def boundary(self, *, high: bool) -> Temporal:
        """The earliest or latest moment it may stand for.

        Source: FHIRPath v3.0.0, sections "lowBoundary" and "highBoundary". A time of day without zone is
        taken at the zone that makes it earliest (+14:00) or latest (-12:00); a mere day keeps none, so that
        two days are compared as days.
        """
        edge: tuple[Part, ...] = (23, 59, Decimal("59.999")) if high else (0, 0, Decimal("0.000"))
        if self.kind == "time":
            return Temporal("time", _filled(self.parts, edge, high=high))
        days = self.parts[:_DAY_PARTS]
        parts = (*days, *((12, 31) if high else (1, 1))[len(days) - 1 :])
        if high and len(days) < _DAY_PARTS:
            parts = (*parts[:2], _last_day(int(parts[0]), int(parts[1])))
        if self.kind == "date":
            return Temporal("date", parts)
        clock = self.parts[_DAY_PARTS:]
        zone = self.zone
        if clock and zone is None:
            zone = -12 * 60 if high else 14 * 60
        return Temporal("dateTime", (*parts, *_filled(clock, edge, high=high)), zone)

    def __str__(self) -> str:
        widths = (2, 2, 2) if self.kind == "time" else (4, 2, 2, 2, 2, 2)
        shown = [_shown(part, width) for part, width in zip(self.parts, widths, strict=False)]
        if self.kind == "time":
            return ":".join(shown)
        text = "-".join(shown[:_DAY_PARTS])
        if len(shown) <= _DAY_PARTS:
            return text
        text += "T" + ":".join(shown[_DAY_PARTS:])
        if self.zone is None:
            return text
        if self.zone == 0:
            return text + "Z"
        return f"{text}{'-' if self.zone < 0 else '+'}{abs(self.zone) // 60:02}:{abs(self.zone) % 60:02}"


def _shown(part: Part, width: int) -> str:
    whole = f"{int(part):0{width}}"
    _, dot, fraction = str(part).partition(".") if isinstance(part, Decimal) else ("", "", "")
    return whole + dot + fraction


def _filled(parts: tuple[Part, ...], edge: tuple[Part, ...], *, high: bool) -> tuple[Part, ...]:
    """A time of day to the millisecond: what is missing is taken from the edge."""
    filled = (*parts, *edge[len(parts) :])
    second = Decimal(filled[-1])
    digits = -int(second.as_tuple().exponent)
    if digits < 3:
        step = Decimal("0.999") if digits == 0 else Decimal(10) ** -digits - Decimal("0.001")
        second = second.quantize(Decimal("0.001")) + (step if high else 0)
    return (*filled[:-1], second)


def _zone(text: str | None) -> int | None:
    if text is None:
        return None
    if text == "Z":
        return 0
    minutes = int(text[1:3]) * 60 + int(text[4:6])
    return -minutes if text[0] == "-" else minutes


def _is_calendar(parts: list[Part]) -> bool:
    if parts[0] == 0 or (len(parts) > 1 and not 1 <= parts[1] <= 12):
        return False
    if len(parts) >= _DAY_PARTS and not 1 <= parts[2] <= _last_day(int(parts[0]), int(parts[1])):
        return False
    return _is_clock(parts[_DAY_PARTS:])


def _is_clock(parts: list[Part]) -> bool:
    # 60 is a leap second; 24:00 is refused as FHIR does
    return all(part < limit for part, limit in zip(parts, (24, 60, 61), strict=False))


def _last_day(year: int, month: int) -> int:
    if month == 12:
        return 31
    return (date(year, month + 1, 1) - timedelta(days=1)).day
