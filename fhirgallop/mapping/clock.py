"""The examination's time, as a form writes it.

Sources: ISO 8601 and FHIR R4 dateTime for the outcome; the IANA time zone database, through the standard
library, for zones with a name.
"""

from __future__ import annotations

import re
from datetime import datetime
from typing import Final
from zoneinfo import ZoneInfo

from fhirgallop.exam.moment import Moment, parse

_TOKENS: Final = {
    "YYYY": "(?P<year>[0-9]{4})",
    "MM": "(?P<month>[0-9]{1,2})",
    "DD": "(?P<day>[0-9]{1,2})",
    "hh": "(?P<hour>[0-9]{1,2})",
    "mm": "(?P<minute>[0-9]{2})",
    "ss": "(?P<second>[0-9]{2})",
}
_TOKEN: Final = re.compile("(YYYY|MM|DD|hh|mm|ss)")
_OFFSET: Final = re.compile("[+-](?:0[0-9]|1[0-4]):[0-5][0-9]", re.ASCII)
_CLOCK_AFTER: Final = " (?P<hour>[0-9]{1,2}):(?P<minute>[0-9]{2})(?::(?P<second>[0-9]{2}))?"


def written_form(form: str) -> re.Pattern[str] | str:
    """The pattern of a form such as `DD.MM.YYYY hh:mm`, or a sentence that says why it is none.

    A form without a time of day accepts one after it, written hh:mm or hh:mm:ss.
    """
    pieces = _TOKEN.split(form)
    tokens = pieces[1::2]
    if len(tokens) != len(set(tokens)):
        return "a part (such as MM) stands twice in it; MM is the month, mm the minute"
    if "YYYY" not in tokens:
        return "it lacks the year, written YYYY"
    if ("DD" in tokens and "MM" not in tokens) or ("hh" in tokens and not {"DD", "mm"} <= set(tokens)):
        return "a day (DD) needs its month (MM), and a time of day needs hh, mm and the day"
    if re.search("[A-Za-z]", "".join(pieces[::2]).replace("T", "")):
        return "it holds letters other than YYYY, MM, DD, hh, mm, ss"
    pattern = "".join(_TOKENS.get(piece) or re.escape(piece) for piece in pieces)
    if "hh" not in tokens and "DD" in tokens:
        pattern = f"{pattern}(?:{_CLOCK_AFTER})?"
    return re.compile(pattern, re.ASCII)


def zone_is_known(zone: str) -> bool:
    """True for Z, an offset, or a name of the time zone database."""
    return zone == "Z" or bool(_OFFSET.fullmatch(zone)) or _named(zone) is not None


def read(text: str, zone: str, form: re.Pattern[str] | None) -> Moment | str:
    """The moment that `text` means, or a sentence that says why it means none."""
    if form:
        match = form.fullmatch(text.strip())
        if not match:
            return "it is not written in the form that the map states"
        text = _iso(match.groupdict())
    if not zone or zone == "Z" or zone[0] in "+-":
        return parse(text, zone=zone)
    moment = parse(text)
    if isinstance(moment, Moment):
        return moment
    moment = parse(text, zone="Z")
    return _in_zone(moment.start.removesuffix("Z"), zone) if isinstance(moment, Moment) else moment


def _iso(parts: dict[str, str | None]) -> str:
    text = parts["year"] or ""
    for name in ("month", "day"):
        if number := parts.get(name):
            text = f"{text}-{number:0>2}"
    if hour := parts.get("hour"):
        text = f"{text}T{hour:0>2}:{parts['minute']}"
        if second := parts.get("second"):
            text = f"{text}:{second}"
    return text


def _in_zone(local: str, zone: str) -> Moment | str:
    named = _named(zone)
    if named is None:
        return "its time zone is not known on this machine"
    early = datetime.fromisoformat(local).replace(tzinfo=named)
    try:
        offset, other = early.utcoffset(), early.replace(fold=1).utcoffset()
    except OverflowError:
        return "there is no such time in the calendar"
    if offset is None or offset != other:
        return (
            "clocks were changed in that hour, so it happened twice or never; send the time with its offset, "
            "such as +01:00"
        )
    minutes = round(offset.total_seconds() / 60)
    sign = "-" if minutes < 0 else "+"
    return Moment(f"{local}{sign}{abs(minutes) // 60:02d}:{abs(minutes) % 60:02d}")


def _named(zone: str) -> ZoneInfo | None:
    if not re.fullmatch(r"[A-Za-z][A-Za-z0-9_+-]*(?:/[A-Za-z0-9_+-]+){0,2}", zone):
        return None
    try:
        return ZoneInfo(zone)
    except (KeyError, ValueError, OSError):
        return None
