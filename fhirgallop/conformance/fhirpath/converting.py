# ruff: noqa: ARG001 - all compiled code has one signature, whether it looks at everything or not
"""Conversions and mathematics.

Source: FHIRPath N1 (v2.0.0), sections 5.5 and 5.7.
"""

from __future__ import annotations

import decimal
import re
from collections.abc import Callable, Mapping, Sequence
from decimal import Decimal
from typing import Any

from fhirgallop.conformance.fhirpath.frame import Code, Frame, argument
from fhirgallop.conformance.fhirpath.function import Body, Function, integer_argument, text_argument
from fhirgallop.conformance.fhirpath.items import CannotJudge, Collection, Item, is_number, singleton
from fhirgallop.conformance.fhirpath.operators import EMPTY, FALSE, TRUE
from fhirgallop.conformance.fhirpath.quantity import CALENDAR_UNITS, Quantity
from fhirgallop.conformance.fhirpath.temporal import Temporal

_TRUE = frozenset(("true", "t", "yes", "y", "1", "1.0"))
_FALSE = frozenset(("false", "f", "no", "n", "0", "0.0"))
_INTEGER = re.compile(r"[+-]?[0-9]{1,30}", re.ASCII)
_DECIMAL = re.compile(r"[+-]?[0-9]{1,500}(\.[0-9]{1,500})?", re.ASCII)
_QUANTITY = re.compile(
    r"([+-]?[0-9]{1,100}(?:\.[0-9]{1,100})?)(?: +(?:'([^']{1,100})'|([a-z]{1,20})))?", re.ASCII
)
_CONTEXT = decimal.Context(prec=34, traps=[], Emax=10_000, Emin=-10_000)
_PRINTED_DIGITS = 2_000


def _boolean(value: Any) -> bool | None:
    if isinstance(value, bool):
        return value
    if is_number(value):
        return {1: True, 0: False}.get(value)
    if isinstance(value, str):
        return True if value.lower() in _TRUE else False if value.lower() in _FALSE else None
    return None


def _integer(value: Any) -> int | None:
    if isinstance(value, int):
        return int(value)
    return int(value) if isinstance(value, str) and _INTEGER.fullmatch(value) else None


def _decimal(value: Any) -> Decimal | None:
    if isinstance(value, int | Decimal):
        return Decimal(value)
    return Decimal(value) if isinstance(value, str) and _DECIMAL.fullmatch(value) else None


def _date(value: Any) -> Temporal | None:
    moment = _date_time(value)
    return None if moment is None else Temporal("date", moment.parts[:3])


def _date_time(value: Any) -> Temporal | None:
    if isinstance(value, str):
        value = Temporal.parse(value)
    if not isinstance(value, Temporal) or value.kind == "time":
        return None
    return Temporal("dateTime", value.parts, value.zone)


def _time(value: Any) -> Temporal | None:
    if isinstance(value, str):
        return Temporal.parse_time(value)
    return value if isinstance(value, Temporal) and value.kind == "time" else None


def _quantity(value: Any) -> Quantity | None:
    if isinstance(value, Quantity):
        return value
    if isinstance(value, int | Decimal):
        return Quantity(Decimal(value))
    match = _QUANTITY.fullmatch(value) if isinstance(value, str) else None
    if match is None or (match[3] and match[3] not in CALENDAR_UNITS):
        return None
    return Quantity(Decimal(match[1]), match[2] or CALENDAR_UNITS.get(match[3] or "", "1"))


def text_of(value: Any) -> str | None:
    """`toString()` of a System value; None for what has no text."""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, Decimal):
        if not value.is_finite() or abs(value.adjusted()) > _PRINTED_DIGITS:
            raise CannotJudge("a number is too long to be written out")
        return f"{value:f}"
    if isinstance(value, Item):
        return None
    if isinstance(value, int) and abs(value) > 10**_PRINTED_DIGITS:
        raise CannotJudge("a number is too long to be written out")
    return str(value)


def _converter(work: Callable[[Any], Any]) -> Body:
    def run(focus: Collection, frame: Frame, args: Sequence[Code]) -> Collection:
        value = singleton(focus)
        result = None if value is None else work(value)
        return EMPTY if result is None else [result]

    return run


def _test(work: Callable[[Any], Any]) -> Body:
    def run(focus: Collection, frame: Frame, args: Sequence[Code]) -> Collection:
        value = singleton(focus)
        if value is None:
            return EMPTY
        return FALSE if work(value) is None else TRUE

    return run


def _number(focus: Collection) -> Decimal | None:
    value = singleton(focus)
    if value is None:
        return None
    if not is_number(value):
        raise CannotJudge("a function of numbers is used on something else")
    return Decimal(value)


def _math(work: Callable[[Decimal], Decimal], *, whole: bool = False) -> Body:
    def run(focus: Collection, frame: Frame, args: Sequence[Code]) -> Collection:
        number = _number(focus)
        if number is None:
            return EMPTY
        result = work(number)
        if not result.is_finite() or (whole and abs(result.adjusted()) > 60):
            return EMPTY
        return [int(result) if whole else result]

    return run


def _absolute(focus: Collection, frame: Frame, args: Sequence[Code]) -> Collection:
    value = singleton(focus)
    if value is None:
        return EMPTY
    if isinstance(value, Quantity):
        return [Quantity(abs(value.value), value.unit, value.system)]
    if not is_number(value):
        raise CannotJudge("a function of numbers is used on something else")
    return [value.copy_abs() if isinstance(value, Decimal) else abs(value)]


def _whole(rounding: str) -> Callable[[Decimal], Decimal]:
    return lambda number: number.to_integral_value(rounding=rounding) if number.adjusted() < 60 else number


def _round(focus: Collection, frame: Frame, args: Sequence[Code]) -> Collection:
    number = _number(focus)
    digits = (integer_argument(args[0], frame) if args else 0) or 0
    if number is None or not 0 <= digits <= 28:
        return EMPTY
    result = _CONTEXT.quantize(number, Decimal(1).scaleb(-digits))
    return [result] if result.is_finite() else EMPTY


def _log(focus: Collection, frame: Frame, args: Sequence[Code]) -> Collection:
    number, base = _number(focus), _number(argument(args[0], frame))
    if number is None or base is None:
        return EMPTY
    result = _CONTEXT.divide(_CONTEXT.ln(number), _CONTEXT.ln(base))
    return [_CONTEXT.quantize(result, Decimal("1e-15")).normalize(_CONTEXT)] if result.is_finite() else EMPTY


def _power(focus: Collection, frame: Frame, args: Sequence[Code]) -> Collection:
    number, exponent = _number(focus), _number(argument(args[0], frame))
    if number is None or exponent is None:
        return EMPTY
    result = _CONTEXT.power(number, exponent)
    if not result.is_finite():
        return EMPTY
    whole = isinstance(singleton(focus), int) and exponent == int(exponent) >= 0 and result.adjusted() < 30
    return [int(result) if whole else result]


def _to_quantity(focus: Collection, frame: Frame, args: Sequence[Code]) -> Collection:
    value = singleton(focus)
    quantity = None if value is None else _quantity(value)
    unit = text_argument(args[0], frame) if args else None
    if quantity is None or unit is None:
        return EMPTY if quantity is None else [quantity]
    return [quantity] if quantity.unit == CALENDAR_UNITS.get(unit, unit) else EMPTY


_CONVERSIONS: Mapping[str, Callable[[Any], Any]] = {
    "Boolean": _boolean,
    "Integer": _integer,
    "Decimal": _decimal,
    "Date": _date,
    "DateTime": _date_time,
    "Time": _time,
    "String": text_of,
}

FUNCTIONS: Mapping[str, Function] = {
    **{f"to{name}": Function(_converter(work)) for name, work in _CONVERSIONS.items()},
    **{f"convertsTo{name}": Function(_test(work)) for name, work in _CONVERSIONS.items()},
    "toQuantity": Function(_to_quantity, 0, 1),
    "convertsToQuantity": Function(_test(_quantity), 0, 1),
    "abs": Function(_absolute),
    "ceiling": Function(_math(_whole(decimal.ROUND_CEILING), whole=True)),
    "floor": Function(_math(_whole(decimal.ROUND_FLOOR), whole=True)),
    "truncate": Function(_math(_whole(decimal.ROUND_DOWN), whole=True)),
    "round": Function(_round, 0, 1),
    "exp": Function(_math(_CONTEXT.exp)),
    "ln": Function(_math(_CONTEXT.ln)),
    "log": Function(_log, 1, 1),
    "power": Function(_power, 1, 1),
    "sqrt": Function(_math(_CONTEXT.sqrt)),
}
