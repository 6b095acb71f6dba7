r"""Clause: the format of primitive values: JSON kind, regular expression, calendar, length, range.

Source: FHIR data types, primitive types (R4, R4B, R5); the expressions are those of the definitions,
matched whole and with ASCII classes (their `\S` holds every character beyond ASCII).
"""

from __future__ import annotations

import re
from collections.abc import Iterator
from decimal import Decimal
from functools import cache, lru_cache
from math import isfinite

from fhirgallop.conformance.editions import Edition
from fhirgallop.conformance.editions.model import TypeDef
from fhirgallop.conformance.node import Node
from fhirgallop.outcome import Issue

RANGES = {
    "integer": (-(2**31), 2**31 - 1),
    "unsignedInt": (0, 2**31 - 1),
    "positiveInt": (1, 2**31 - 1),
    "integer64": (-(2**63), 2**63 - 1),
}
_CONTROL = re.compile("[\x00-\x08\x0b\x0c\x0e-\x1f]")
_BASE64 = re.compile(r"[A-Za-z0-9+/]*={0,2}", re.ASCII)
_SPACE = re.compile(r"\s+", re.ASCII)
_BREAK = re.compile("[\t-\r]")
_DATES = ("date", "dateTime", "instant")
_CURES = {
    "boolean": "Write true or false without quotation marks.",
    "integer": "Write a whole number without quotation marks.",
    "decimal": "Write a number without quotation marks.",
    "string": "Write it as text in quotation marks.",
}
_FORMS = {
    "date": "YYYY, YYYY-MM or YYYY-MM-DD",
    "dateTime": "YYYY, YYYY-MM, YYYY-MM-DD or YYYY-MM-DDThh:mm:ss with a time zone",
    "instant": "YYYY-MM-DDThh:mm:ss with a time zone",
    "time": "hh:mm:ss without a time zone",
    "id": "1 to 64 letters, digits, '-' and '.'",
    "code": "no space at its ends, single spaces inside",
    "uri": "no white space",
    "url": "no white space",
    "canonical": "no white space",
    "oid": "urn:oid: and numbers with dots",
    "uuid": "urn:uuid: and a UUID in lower case",
    "base64Binary": "base64 in groups of four characters",
}


def check(node: Node, edition: Edition) -> Iterator[Issue]:
    """Issues of one primitive node that has a value."""
    definition = edition.type(node.type_name)
    value = node.value
    if definition is None or value is None:
        return
    if not has_json_kind(value, definition):
        said = f"This {definition.name} has the wrong JSON type. {_CURES[definition.json]}"
        yield Issue("error", "value", "primitive-type", said, expression=node.expression)
    elif definition.json == "string":
        yield from _text(node, definition, value, edition)
    elif definition.json == "integer":
        yield from _range(node, definition.name, int(value))
    elif definition.json == "decimal" and edition.name == "R5":
        yield from _digits(node, value)


def has_json_kind(value: object, definition: TypeDef) -> bool:
    """Whether the JSON value is of the kind the primitive type is written in."""
    kind = definition.json
    if kind == "string":
        return isinstance(value, str)
    if kind == "boolean":
        return isinstance(value, bool)
    if isinstance(value, bool):
        return False
    if kind == "integer":
        return isinstance(value, int) or (isinstance(value, Decimal) and value.as_tuple().exponent == 0)
    return isinstance(value, (int, Decimal)) or (isinstance(value, float) and isfinite(value))


def _text(node: Node, definition: TypeDef, value: str, edition: Edition) -> Iterator[Issue]:
    name = definition.name
    if value == "":
        said = f"This {name} is an empty text. Leave the element out when there is nothing to say."
        yield Issue("error", "value", "primitive-empty", said, expression=node.expression)
        return
    limit = _limit(name, edition)
    if limit and len(value) > limit:
        said = f"This {name} is longer than {limit} characters. Shorten it."
        yield Issue("error", "too-long", "primitive-length", said, expression=node.expression)
    elif not _matches(definition, value) or (name != "xhtml" and _CONTROL.search(value)):
        form = _FORMS.get(name)
        said = f"This is no valid {name}. " + (
            f"Its form is: {form}." if form else "Remove the characters that FHIR forbids."
        )
        yield Issue("error", "value", "primitive-format", said, expression=node.expression)
    elif name in _DATES and not _in_calendar(value):
        said = f"The calendar has no such day as this {name} says. Correct the day."
        yield Issue("error", "value", "date-calendar", said, expression=node.expression)
    elif name == "integer64":
        yield from _range(node, name, int(value))


@cache
def _pattern(text: str) -> re.Pattern[str]:
    return re.compile(text, re.ASCII)


@lru_cache(maxsize=512)
def _limit(name: str, edition: Edition) -> int:
    """The longest text of a type: its own limit or that of the type it specialises."""
    for step in edition.ancestors(name):
        found = edition.type(step)
        if found is not None and found.max_length:
            return found.max_length
    return 0


def _matches(definition: TypeDef, value: str) -> bool:
    if definition.name == "base64Binary":
        # R4 allows white space, and its expression takes '=' anywhere; base64 (RFC 4648) does not
        packed = _SPACE.sub("", value) if definition.pattern.startswith(r"(\s*") else value
        return len(packed) % 4 == 0 and _BASE64.fullmatch(packed) is not None
    if not definition.pattern:
        return True
    if definition.name == "integer64" and len(value) > 20:
        return False
    if definition.name == "code" and _BREAK.search(value):
        return False  # "no whitespace other than single spaces": the expression of R4 and R4B takes any
    return _pattern(definition.pattern).fullmatch(value) is not None


def _in_calendar(value: str) -> bool:
    """Whether the day exists; the form has been matched before."""
    if len(value) < 10:
        return True
    year, month, day = int(value[:4]), int(value[5:7]), int(value[8:10])
    if day < 29:
        return True
    if month == 2:
        return day == 29 and year % 4 == 0 and (year % 100 != 0 or year % 400 == 0)
    return day < 31 or month not in (4, 6, 9, 11)


def _range(node: Node, name: str, value: int) -> Iterator[Issue]:
    low, high = RANGES[name]
    if not low <= value <= high:
        said = f"This {name} must lie between {low} and {high}. Correct the number."
        yield Issue("error", "value", "primitive-range", said, expression=node.expression)


def _digits(node: Node, value: float | Decimal) -> Iterator[Issue]:
    """R5 limits a decimal to 18 digits before and 17 behind the point (an exponent apart)."""
    digits = Decimal(repr(value) if isinstance(value, float) else value).as_tuple()
    exponent = digits.exponent if isinstance(digits.exponent, int) else 0
    count = len(digits.digits)
    if count > 35 or (exponent == 0 and count > 18) or (-exponent > 17 and count > 18):
        said = "This decimal has more digits than R5 allows (18 before the point, 17 behind). Round it."
        yield Issue("error", "value", "primitive-format", said, expression=node.expression)
