"""The values of OBX-5 by the type that OBX-2 names, and HL7 times as ISO 8601 text.

Sources: HL7 v2.8.2 chapter 2A (data types) and table 0125; HL7 v2-to-FHIR guide, segment map OBX[Observation]
(read 2026-12: which type becomes which value; for SN the quantity first and text last).
"""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from decimal import Decimal
from typing import Final

from fhirgallop.codes import systems
from fhirgallop.intake.hl7_syntax import DELETE, Message, unescaped
from fhirgallop.intake.record import Amount, Coded, Span, Value

_NUMBER: Final = re.compile(r"[+-]?(?:[0-9]{1,40}(?:\.[0-9]{0,40})?|\.[0-9]{1,40})", re.ASCII)
_TIME: Final = re.compile(
    r"(?P<year>[0-9]{4})(?:(?P<month>[0-9]{2})(?:(?P<day>[0-9]{2})(?:(?P<hour>[0-9]{2})(?:(?P<minute>[0-9]{2})"
    r"(?:(?P<second>[0-9]{2})(?P<fraction>\.[0-9]{1,4})?)?)?)?)?)?(?P<zone>[+-][0-9]{4})?",
    re.ASCII,
)
_CLOCK: Final = re.compile(
    r"([0-9]{2})(?:([0-9]{2})(?:([0-9]{2})(\.[0-9]{1,4})?)?)?([+-][0-9]{4})?", re.ASCII
)
_SYSTEMS: Final = {"LN": systems.LOINC, "SCT": systems.SNOMED, "UCUM": systems.UCUM}
_COMPARATORS: Final = ("", "=", "<", "<=", ">", ">=")

NOT_CARRIED: Final = frozenset(
    (
        "NA",
        "ED",
        "RP",
        "EI",
        "VR",
        "CQ",
        "MO",
        "CX",
        "AD",
        "XAD",
        "PN",
        "XPN",
        "CN",
        "XCN",
        "XON",
        "TN",
        "XTN",
        "FN",
    )
)
"""Types of table 0125 that hold no answer of an examination form: waveforms, files, persons, addresses."""


@dataclass(frozen=True, slots=True)
class Fault:
    """Something wrong with a value: rule, and what is wrong with its cure."""

    rule: str
    text: str


Read = tuple[Value | None, Fault | None]
"""A value (None for none at all) and what is wrong with it; a value that has a fault is the text as sent."""


def reader(value_type: str) -> Callable[[str, str, Message], Read] | None:
    """The function that reads a repetition of OBX-5 (raw text, unit, message); None for other types."""
    return _READERS.get(value_type)


def iso_time(text: str) -> str | None:
    """An HL7 DTM as ISO 8601 text with the same precision; None when it is none.

    An hour without minutes has no such text and becomes its day; a zone stays only with a time of day.
    """
    found = _TIME.fullmatch(text.strip())
    if not found:
        return None
    day = "-".join(part for part in found.group("year", "month", "day") if part)
    hour, minute, second = found.group("hour", "minute", "second")
    if minute is None:
        return day
    zone = found["zone"] or ""
    clock = f"{hour}:{minute}" + (f":{second}{found['fraction'] or ''}" if second else "")
    return f"{day}T{clock}{zone[:3]}{':' if zone else ''}{zone[3:]}"


def _none(raw: str) -> bool:
    return not raw.strip() or raw.strip() == DELETE


def _text(raw: str, unit: str, message: Message) -> Read:
    """ST, FT, TX, and what the standard leaves as text."""
    if _none(raw):
        return None, None
    text, clean = unescaped(raw, message.delimiters, message.charset)
    fault = None
    if not clean:
        words = "An escape sequence is unknown or open and was left as written; send a lone mark as \\E\\."
        fault = Fault("hl7-unknown-escape", words)
    # A number sent as text keeps its unit, so that it cannot be taken for one in another unit.
    return (f"{text} {unit}" if unit and any(map(str.isdigit, text)) else text), fault


def _number(raw: str, unit: str, message: Message) -> Read:
    """NM: digits with a point; anything else stays text, for the map to judge."""
    if _none(raw):
        return None, None
    number = _decimal(raw)
    if number is None:
        text = "The value of type NM is no number with a decimal point; it was kept as text."
        return _text(raw, unit, message)[0], Fault("hl7-not-a-number", text)
    return (Amount(number, unit) if unit else number), None


def _decimal(text: str) -> Decimal | None:
    text = text.strip()
    return Decimal(text) if _NUMBER.fullmatch(text) else None


def _structured(raw: str, unit: str, message: Message) -> Read:
    """SN: comparator^number^separator^number."""
    if _none(raw):
        return None, None
    comparator, first, separator, second = ([part.strip() for part in message.components(raw)] + [""] * 4)[:4]
    low, high = _decimal(first), _decimal(second)
    if low is not None and comparator in _COMPARATORS and not separator and not second:
        return Amount(low, unit, comparator.replace("=", "") if comparator == "=" else comparator), None
    if comparator in ("", "=") and low is not None and separator == "-" and high is not None:
        return Span(low, high, unit), None
    written = f"{comparator}{first}{separator}{second}" + (f" {unit}" if unit else "")
    paired = separator in (":", "/") and high is not None
    if low is not None and (separator == "+" or paired or comparator == "<>"):
        return written, None
    text = "The value of type SN is not comparator^number^separator^number; it was kept as text."
    return written, Fault("hl7-malformed-sn", text)


def _range(raw: str, unit: str, message: Message) -> Read:
    """NR: low^high, one of them may be missing."""
    if _none(raw):
        return None, None
    low, high = ([part.strip() for part in message.components(raw)] + [""])[:2]
    ends = (_decimal(low), _decimal(high))
    if (low and ends[0] is None) or (high and ends[1] is None) or ends == (None, None):
        text = "The value of type NR is not low^high with numbers; it was kept as text."
        return _text(raw, unit, message)[0], Fault("hl7-malformed-nr", text)
    return Span(*ends, unit), None


def _coded(raw: str, _unit: str, message: Message) -> Read:
    """CWE, CE, CNE, CF, IS: the first triplet with a code, else the alternate one, else the text alone."""
    parts = (["" if part == DELETE else part.strip() for part in message.components(raw)] + [""] * 9)[:9]
    code, display, system, other, other_display, other_system = parts[:6]
    if not code and other:
        code, display, system = other, other_display, other_system
    display = display or parts[8]
    if not code and not display:
        return None, None
    return Coded(code, display, _SYSTEMS.get(system, system)), None


def _time(raw: str, _unit: str, message: Message) -> Read:
    """DT, DTM, TS."""
    if _none(raw):
        return None, None
    written = message.component(raw)
    time = iso_time(written)
    if time is None:
        return written, Fault("hl7-bad-time", "The date or time is not of the form YYYYMMDDHHMMSS+ZZZZ.")
    return time, None


def _clock(raw: str, _unit: str, _message: Message) -> Read:
    """TM."""
    if _none(raw):
        return None, None
    found = _CLOCK.fullmatch(raw.strip())
    if not found or not found[2]:
        return raw.strip(), Fault("hl7-bad-time", "The time of day is not of the form HHMM[SS].")
    zone = found[5] or ""
    seconds = f":{found[3]}{found[4] or ''}" if found[3] else ""
    return f"{found[1]}:{found[2]}{seconds}{zone[:3]}{':' if zone else ''}{zone[3:]}", None


def _period(raw: str, unit: str, message: Message) -> Read:
    """DR: start^end, as an ISO 8601 interval."""
    if _none(raw):
        return None, None
    ends = [iso_time(part) if part.strip() else "" for part in (*message.components(raw), "")[:2]]
    if None in ends:
        text = "The value of type DR is not start^end with dates; it was kept as text."
        return _text(raw, unit, message)[0], Fault("hl7-bad-time", text)
    return "/".join(end or ".." for end in ends), None


_READERS: Final[Mapping[str, Callable[[str, str, Message], Read]]] = {
    "NM": _number,
    "SI": _number,
    "SN": _structured,
    "NR": _range,
    **dict.fromkeys(("CWE", "CE", "CNE", "CF", "IS", "ID"), _coded),
    **dict.fromkeys(("ST", "FT", "TX"), _text),
    **dict.fromkeys(("DT", "DTM", "TS"), _time),
    "TM": _clock,
    "DR": _period,
}
