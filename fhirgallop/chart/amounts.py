"""Numbers of a chart in the unit of their id, converted where they can be and refused where they cannot.

Sources: FHIR R4 Quantity (code and system say the unit, unit is for people), Range; UCUM 2.1.
"""

from __future__ import annotations

from decimal import Decimal
from typing import Any, Final

from fhirgallop.chart.elements import Element, element, text
from fhirgallop.chart.known import Known
from fhirgallop.chart.log import Log
from fhirgallop.codes import systems, units
from fhirgallop.codes.units import Unit
from fhirgallop.exam.entry import Measure

_COMPARATORS: Final = frozenset({"", "<", "<=", ">=", ">"})
_UNITLESS: Final = frozenset({"1", "{ratio}", "{score}"})
_MAX_DIGITS: Final = 40
_MAX_EXPONENT: Final = 20


def measure(name: str, value: Any, known: Known, log: Log, place: str) -> Measure | None:
    """The number in the canonical unit of `known`, or None with an issue.

    Args:
        name: name of the value element, such as `valueQuantity`.
        value: its content.
        known: the id it belongs to.
        log: takes what is wrong.
        place: where it stands.
    """
    held = element(value)
    if name == "valueQuantity":
        return _quantity(held, known, log, place)
    if name == "valueRange":
        low = _quantity(element(held.get("low")), known, log, f"{place}.low")
        high = _quantity(element(held.get("high")), known, log, f"{place}.high")
        if low is None or high is None:
            return None
        if low.comparator or high.comparator or low.value > high.value:
            log.add(
                "warning", "value", "chart-number", "The range is not from a lower to a higher number.", place
            )
            return None
        original = f"{low.original} to {high.original}" if low.original and high.original else ""
        return Measure(low.value, low.unit, "", high.value, original)
    if name == "valueInteger":
        return _quantity({"value": value}, known, log, place)
    words = "A number is measured here; send it as a Quantity with its unit."
    log.add("warning", "value", "chart-number", words, place)
    return None


def _quantity(quantity: Element, known: Known, log: Log, place: str) -> Measure | None:
    value = number(quantity.get("value"))
    comparator = quantity.get("comparator", "")
    if value is None or not isinstance(comparator, str) or comparator not in _COMPARATORS:
        log.add(
            "warning",
            "value",
            "chart-number",
            "There is no number here that can be used; it was left out.",
            place,
        )
        return None
    target = units.table().by_code[known.unit]
    found = _unit(quantity, target, log, place)
    if found is None:
        return None
    if found.dimension != target.dimension:
        words = (
            f"The unit measures something else than {known.id}, which needs one like {target.code}; left out."
        )
        log.add("warning", "value", "chart-unit", words, place)
        return None
    converted = units.convert(value, found, target)
    original = "" if found == target else f"{value} {found.printed}"
    return Measure(converted, target.code, comparator, original=original)


def _unit(quantity: Element, target: Unit, log: Log, place: str) -> Unit | None:
    code, printed = text(quantity.get("code")), text(quantity.get("unit"))
    coded = units.table().by_code.get(code) if quantity.get("system") == systems.UCUM else None
    worded = units.table().find(printed) if printed else None
    if coded is not None and worded is not None and coded.dimension != worded.dimension:
        words = "The unit's code and its text name different units; the number was left out."
        log.add("warning", "value", "chart-unit", words, place)
        return None
    found = coded or worded or (units.table().find(code) if code else None)
    if found is None and not code and not printed and target.code in _UNITLESS:
        return target
    if found is None:
        words = (
            f"The number has no unit that is known; send the UCUM code ({target.code}, say). It was left out."
        )
        log.add("warning", "value", "chart-unit", words, place)
    return found


def number(value: Any) -> Decimal | None:
    """A finite number of a reasonable size."""
    if isinstance(value, bool) or not isinstance(value, (int, float, Decimal)):
        return None
    if isinstance(value, int) and value.bit_length() > 4 * _MAX_DIGITS:
        return None
    found = Decimal(repr(value)) if isinstance(value, float) else Decimal(value)
    if not found.is_finite() or len(found.as_tuple().digits) > _MAX_DIGITS:
        return None
    return found if not found or abs(found.adjusted()) <= _MAX_EXPONENT else None


def implausible(found: Measure, known: Known) -> bool:
    """True when the number lies outside what is plausible for its id."""
    high = found.high if found.high is not None else found.value
    return (known.low is not None and high < known.low) or (
        known.high is not None and found.value > known.high
    )
