"""Numbers with their units, from whatever a field holds, exact to the last digit.

Source: UCUM 2.1 for units (terminology/units.csv); FHIR R4 Quantity for comparators.
"""

from __future__ import annotations

import re
from collections.abc import Callable
from dataclasses import dataclass
from decimal import Decimal
from typing import Final, NamedTuple

from fhirgallop.codes.units import Unit, UnitTable, convert
from fhirgallop.exam.entry import Measure
from fhirgallop.intake.record import Amount, Coded, Span, Value
from fhirgallop.mapping.template_map import NumberForm

_NUMBER: Final = r"[+-]?[0-9]{1,30}(?:[.,][0-9]{1,30})?"
_TEXT: Final = re.compile(
    rf"(?P<comparator><=|>=|<|>|\u2264|\u2265)? ?(?P<low>{_NUMBER})"
    rf"(?: ?(?:-|\u2013|\u2014|to|bis) ?(?P<high>{_NUMBER}))?"
    r" ?(?P<unit>[^\s0-9.,][^\n]{0,40})?",
    re.ASCII,
)
_COMPARATORS: Final = {
    "": "",
    "<": "<",
    "<=": "<=",
    ">": ">",
    ">=": ">=",
    "\u2264": "<=",
    "\u2265": ">=",
    "=": "",
}
# Wider numbers are no measurement; exact conversion of 1E+400 would fill the memory.
_WIDEST: Final = 40


@dataclass(frozen=True, slots=True)
class NumberFault:
    """Why a value is not the number that a line wants: rule, issue type, and a sentence with its cure."""

    rule: str
    code: str
    text: str


# None: the part of the box that was asked for is blank.
Measured = Measure | NumberFault | None
IsBlank = Callable[[Value], bool]
# A dash in place of a number says that there is none.
_DASHES: Final = frozenset("-\u2013\u2014")
_NOT_A_NUMBER: Final = NumberFault(
    "map-number-unreadable", "value", "it is not a number; send digits, and words in a field of their own"
)
_UNUSABLE: Final = NumberFault(
    "map-number-unusable", "value", "it is too large, or has too many digits, to be measured"
)


class _Sent(NamedTuple):
    """A number as sent, before its unit is looked at."""

    low: Decimal
    high: Decimal | None
    comparator: str
    unit: str


def reader(
    form: NumberForm, target: Unit, units: UnitTable, is_blank: IsBlank
) -> Callable[[Value], Measured]:
    """A function from a field's value to the measure in `target`, or to why there is none.

    `is_blank` tells which wordings count as empty; in a box of several numbers one of them may be blank.
    """
    default = units.by_code.get(form.unit)

    def read(value: Value) -> Measured:
        sent = _sent(value, form, is_blank)
        return _measure(sent, default, target, units) if isinstance(sent, _Sent) else sent

    return read


def parts_in(value: Value, form: NumberForm) -> int:
    """How many numbers one value holds, split as the form says."""
    return value.count(form.split) + 1 if isinstance(value, str) and form.split else 1


def _sent(value: Value, form: NumberForm, is_blank: IsBlank) -> _Sent | NumberFault | None:
    match value:
        case bool():
            return _NOT_A_NUMBER
        case str():
            return _written(value, form, is_blank)
        case Decimal():
            sent = _Sent(value, None, "", "")
        case Amount(number, unit, comparator):
            if comparator not in _COMPARATORS:
                return NumberFault("map-number-comparator", "value", "its comparator is none of < <= >= >")
            sent = _Sent(number, None, _COMPARATORS[comparator], unit)
        case Span(low, high, unit):
            span = _span(low, high, unit)
            if isinstance(span, NumberFault):
                return span
            sent = span
        case Coded(code, display):
            first = _written(code, form, is_blank)
            return _written(display, form, is_blank) if isinstance(first, NumberFault) and display else first
    if form.part > 1:
        return _part_missing(form)
    return _bounded(sent)


def _span(low: Decimal | None, high: Decimal | None, unit: str) -> _Sent | NumberFault:
    """An open end is a limit: from 8 on is `>=8`."""
    if low is None:
        return _NOT_A_NUMBER if high is None else _Sent(high, None, "<=", unit)
    return _Sent(low, None, ">=", unit) if high is None else _Sent(low, high, "", unit)


def _written(text: str, form: NumberForm, is_blank: IsBlank) -> _Sent | NumberFault | None:
    if form.split:
        part = _part(text, form)
        if isinstance(part, NumberFault):
            return part
        if is_blank(part) or part.strip() in _DASHES:
            return None
        text = part
    match = _TEXT.fullmatch(" ".join(text[:200].split()))
    if not match:
        return _NOT_A_NUMBER
    low, high = _decimal(match["low"], form), _decimal(match["high"], form)
    if low is None or (match["high"] and high is None):
        other = "a comma" if form.decimal == "." else "a point"
        cure = "','" if form.decimal == "." else "'.'"
        return NumberFault(
            "map-number-decimal",
            "value",
            f"it is written with {other}, which the map does not expect; write decimal: {cure} in the map, "
            "if that is how the form writes all numbers of this box",
        )
    unit = (match["unit"] or "").strip()
    return _Sent(low, high, _COMPARATORS[match["comparator"] or ""], unit)


def _part(text: str, form: NumberForm) -> str | NumberFault:
    """One of several numbers; a unit after the last of them belongs to all."""
    parts = text.split(form.split)
    if len(parts) < form.part:
        return _part_missing(form)
    if (
        form.part < len(parts)
        and (last := _TEXT.fullmatch(" ".join(parts[-1][:200].split())))
        and last["unit"]
    ):
        mine = parts[form.part - 1].strip()
        return f"{mine} {last['unit']}" if mine[-1:].isdecimal() else mine
    return parts[form.part - 1]


def _part_missing(form: NumberForm) -> NumberFault:
    text = f"it holds no number {form.part} after splitting at {form.split}; correct the record"
    return NumberFault("map-number-part-missing", "value", text)


def _decimal(digits: str | None, form: NumberForm) -> Decimal | None:
    if digits is None or ("," if form.decimal == "." else ".") in digits:
        return None
    return Decimal(digits.replace(",", "."))


def _bounded(sent: _Sent) -> _Sent | NumberFault:
    return sent if _measurable(sent.low) and (sent.high is None or _measurable(sent.high)) else _UNUSABLE


def _measurable(number: Decimal) -> bool:
    return number.is_finite() and -_WIDEST <= number.adjusted() <= _WIDEST and len(str(number)) <= 2 * _WIDEST


def _measure(sent: _Sent, default: Unit | None, target: Unit, units: UnitTable) -> Measured:
    unit = units.find(sent.unit) if sent.unit else default
    if unit is None:
        if sent.unit:
            text = "its unit is not known; send a UCUM unit, or a spelling of terminology/units.csv"
            return NumberFault("map-unit-unknown", "code-invalid", text)
        text = (
            "it comes without a unit and the map names none; send one, or write unit: "
            f"{target.code} in the map"
        )
        return NumberFault("map-unit-missing", "required", text)
    if unit.code == target.code:
        return Measure(sent.low, target.code, sent.comparator, sent.high)
    if unit.dimension != target.dimension:
        text = f"its unit {unit.code} measures something else than {target.code}; correct the unit or the map"
        return NumberFault("map-unit-dimension", "value", text)
    high = None if sent.high is None else convert(sent.high, unit, target)
    ends = f"{sent.low}" if sent.high is None else f"{sent.low}-{sent.high}"
    original = f"{sent.comparator}{ends} {sent.unit or unit.code}"
    return Measure(convert(sent.low, unit, target), target.code, sent.comparator, high, original)
