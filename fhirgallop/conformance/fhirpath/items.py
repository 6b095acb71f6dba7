"""What a FHIRPath collection holds: elements of a resource (Item) and System values.

System values are str, bool, int, Decimal, Temporal and Quantity. `plain` turns a primitive element into one.
Source: FHIRPath N1 (v2.0.0), sections 4 and 6.1; FHIR R4 fhirpath.html ("Using FHIR types in expressions").
"""

from __future__ import annotations

import re
from collections.abc import Iterable
from decimal import Decimal
from typing import Any

from fhirgallop.conformance.fhirpath.quantity import Quantity
from fhirgallop.conformance.fhirpath.temporal import Temporal
from fhirgallop.conformance.node import Node

QUANTITY_TYPES = frozenset(
    ("Quantity", "SimpleQuantity", "Age", "Count", "Distance", "Duration", "Money", "MoneyQuantity")
)
_MOMENTS = frozenset(("date", "dateTime", "instant"))
_INTEGER = re.compile(r"[+-]?[0-9]{1,30}", re.ASCII)

Collection = list[Any]


class CannotJudge(Exception):  # noqa: N818 - it is an outcome, not a fault of the program
    """An expression cannot be decided here; the message says what is missing, without data of the record."""


class Item:
    """One element inside an expression.

    Attributes:
        value: JSON value; None for a primitive that has only a companion, or an unresolved target.
        companion: the `_x` object of a primitive, or None.
        type_name: name for `Edition.type`; "" when unknown.
        owner: the nearest resource.
        reference: set on the target of a reference that cannot be opened here: what was written.
    """

    __slots__ = ("companion", "owner", "reference", "type_name", "value")

    def __init__(
        self, value: Any, companion: Any, type_name: str, owner: Node | None, reference: str = ""
    ) -> None:
        self.value = value
        self.companion = companion
        self.type_name = type_name
        self.owner = owner
        self.reference = reference

    @classmethod
    def of(cls, node: Node) -> Item:
        """The node of the walk as an item."""
        return cls(node.value, node.companion, node.type_name, node.resource)


def plain(item: Any) -> Any:
    """The System value of a primitive or Quantity; None where a primitive has none; else the item itself."""
    if not isinstance(item, Item):
        return item
    value = item.value
    if isinstance(value, str):
        return _typed_text(value, item.type_name)
    if isinstance(value, dict):
        if item.type_name in QUANTITY_TYPES:
            return _quantity(item, value)
        return item
    if value is None:
        return item if item.reference else None
    if isinstance(value, float | Decimal):
        return _number(value)
    return item if isinstance(value, list) else value


def _number(value: float | Decimal) -> Decimal | None:
    """The exact number; None for NaN and infinity, which JSON does not have and other rules report."""
    number = Decimal(repr(value)) if isinstance(value, float) else value
    return number if number.is_finite() else None


def _typed_text(text: str, type_name: str) -> Any:
    if type_name in _MOMENTS:
        moment = Temporal.parse(text)
        if moment is None:
            return text
        return moment if type_name == "date" else Temporal("dateTime", moment.parts, moment.zone)
    if type_name == "time":
        return Temporal.parse_time(text) or text
    if type_name == "integer64" and _INTEGER.fullmatch(text):
        return int(text)
    return text


def _quantity(item: Item, value: dict[str, Any]) -> Any:
    number = value.get("value")
    if isinstance(number, float | Decimal):
        number = _number(number)
    if isinstance(number, bool) or not isinstance(number, int | Decimal):
        return item
    code, system, unit = value.get("code"), value.get("system"), value.get("unit")
    if item.type_name == "Money":
        return Quantity(Decimal(number), str(value.get("currency", "")), "urn:iso:std:iso:4217")
    if isinstance(code, str):
        return Quantity(Decimal(number), code, system if isinstance(system, str) else "")
    if isinstance(unit, str):
        return Quantity(Decimal(number), unit, "")
    return Quantity(Decimal(number))


def is_number(value: Any) -> bool:
    """True for int and Decimal, never for a boolean."""
    return isinstance(value, int | Decimal) and not isinstance(value, bool)


def equal(left: Any, right: Any) -> bool | None:
    """Whether two items are equal; None when it is open (precision, units, a primitive without value)."""
    a, b = plain(left), plain(right)
    if a is None or b is None:
        return None
    if isinstance(a, bool) or isinstance(b, bool):
        return a is b
    if isinstance(a, Quantity) or isinstance(b, Quantity):
        return _equal_quantities(a, b)
    if isinstance(a, Temporal) and isinstance(b, Temporal):
        order = a.compare(b)
        return None if order is None else order == 0
    if isinstance(a, Item) or isinstance(b, Item):
        return isinstance(a, Item) and isinstance(b, Item) and _key_of(a) == _key_of(b)
    if is_number(a) and is_number(b):
        return bool(a == b)
    return type(a) is type(b) and bool(a == b)


def _equal_quantities(a: Any, b: Any) -> bool | None:
    a = Quantity(Decimal(a)) if is_number(a) else a
    b = Quantity(Decimal(b)) if is_number(b) else b
    if not isinstance(a, Quantity) or not isinstance(b, Quantity):
        return False
    order = a.compare(b)
    return None if order is None else order == 0


def order(left: Any, right: Any) -> int | None:
    """-1, 0 or 1; None when it is open.

    Raises:
        CannotJudge: the two are of types that have no order.
    """
    a, b = plain(left), plain(right)
    if a is None or b is None:
        return None
    if is_number(a) and is_number(b):
        return int((a > b) - (a < b))
    if isinstance(a, Quantity) and is_number(b):
        b = Quantity(Decimal(b))
    if isinstance(b, Quantity) and is_number(a):
        a = Quantity(Decimal(a))
    if isinstance(a, Quantity) and isinstance(b, Quantity):
        return a.compare(b)
    if isinstance(a, Temporal) or isinstance(b, Temporal):
        # a text beside a date is a date of another format or a wrong one: its own rule says so
        return a.compare(b) if isinstance(a, Temporal) and isinstance(b, Temporal) else None
    if isinstance(a, str) and isinstance(b, str):
        return (a > b) - (a < b)
    raise CannotJudge("two values of unlike types are compared by size")


def key(item: Any) -> Any:
    """A hashable stand-in: two items have the same one exactly if they are equal."""
    value = plain(item)
    if isinstance(value, str):
        return value
    if isinstance(value, bool):
        return ("boolean", value)
    if isinstance(value, Temporal | Quantity):
        return value.key()
    if isinstance(value, Item):
        return _key_of(value)
    return value if value is not None else ("no value", _json_key(item.companion))


def keys(items: Iterable[Any]) -> set[Any]:
    """The keys of many items."""
    return {key(item) for item in items}


def _key_of(item: Item) -> Any:
    return ("target", item.reference) if item.reference else _json_key(item.value)


def _json_key(value: Any) -> Any:
    if isinstance(value, dict):
        return ("object", frozenset((name, _json_key(part)) for name, part in value.items()))
    if isinstance(value, list):
        return ("array", tuple(_json_key(part) for part in value))
    if isinstance(value, bool):
        return ("boolean", value)
    if isinstance(value, float | Decimal):
        return _number(value)
    return value


def singleton(items: Collection) -> Any:
    """The System value or element of a collection of one; None for an empty one.

    Raises:
        CannotJudge: there are several items.
    """
    if not items:
        return None
    if len(items) > 1:
        raise CannotJudge("several values stand where the expression can take only one")
    return plain(items[0])


def truth(items: Collection) -> bool | None:
    """Boolean reading of a collection (section 4.5 "Singleton evaluation"): None when empty."""
    value = singleton(items)
    if value is None or isinstance(value, bool):
        return value
    return True
