"""The operators of FHIRPath over two compiled operands.

Source: FHIRPath N1 (v2.0.0), section 6 "Operations": three-valued logic (6.5), equality (6.1),
comparison (6.2), collections (6.4), math (6.6).
"""

from __future__ import annotations

import decimal
from collections.abc import Callable, Mapping
from decimal import Decimal
from fractions import Fraction
from typing import Any

from fhirgallop.conformance.fhirpath.frame import Code, Frame
from fhirgallop.conformance.fhirpath.items import (
    CannotJudge,
    Collection,
    Item,
    equal,
    is_number,
    key,
    keys,
    order,
    singleton,
    truth,
)
from fhirgallop.conformance.fhirpath.quantity import Quantity

EMPTY: Collection = []
TRUE: Collection = [True]
FALSE: Collection = [False]

MAX_TEXT = 1_000_000
_ARITHMETIC = decimal.Context(prec=34, traps=[], Emax=10_000, Emin=-10_000)


def boolean(value: bool | None) -> Collection:
    """The collection of a three-valued boolean."""
    return EMPTY if value is None else TRUE if value else FALSE


def _logic(left: Code, right: Code, *, decisive: bool, negated: bool = False) -> Code:
    """`and` (decisive False) and `or` (decisive True); `implies` is `or` with its left side negated.

    A side that cannot be judged does not matter where the other side decides alone.
    """

    def run(focus: Collection, frame: Frame) -> Collection:
        try:
            a = truth(left(focus, frame))
        except CannotJudge:
            if truth(right(focus, frame)) is decisive:
                return boolean(decisive)
            raise
        if negated and a is not None:
            a = not a
        if a is decisive:
            return boolean(decisive)
        b = truth(right(focus, frame))
        return boolean(b if b is decisive or a is not None else None)

    return run


def both(left: Code, right: Code) -> Code:
    """`and`."""
    return _logic(left, right, decisive=False)


def either(left: Code, right: Code) -> Code:
    """`or`."""
    return _logic(left, right, decisive=True)


def implies(left: Code, right: Code) -> Code:
    """`implies`."""
    return _logic(left, right, decisive=True, negated=True)


def exclusive(left: Code, right: Code) -> Code:
    """`xor`."""

    def run(focus: Collection, frame: Frame) -> Collection:
        a, b = truth(left(focus, frame)), truth(right(focus, frame))
        return EMPTY if a is None or b is None else boolean(a is not b)

    return run


def equals(left: Collection, right: Collection) -> bool | None:
    """`=` of two collections: same number, same order, equal in pairs; None when either is empty."""
    if not left or not right:
        return None
    if len(left) != len(right):
        return False
    if len(left) == 1:
        return equal(left[0], right[0])
    if [key(item) for item in left] == [key(item) for item in right]:
        return True
    verdicts = [equal(a, b) for a, b in zip(left, right, strict=True)]
    return False if False in verdicts else None if None in verdicts else True


def equivalent(left: Collection, right: Collection) -> bool:
    """`~`: in any order, texts without regard to case and spacing, numbers to the lesser precision."""
    if len(left) != len(right):
        return False
    if len(left) == 1 and _are_numbers(left[0], right[0]):
        return _equivalent_numbers(singleton(left), singleton(right))
    return sorted(map(_loose_key, left)) == sorted(map(_loose_key, right))


def _are_numbers(left: Any, right: Any) -> bool:
    return is_number(singleton([left])) and is_number(singleton([right]))


def _equivalent_numbers(a: Any, b: Any) -> bool:
    exponents = [-int(Decimal(x).as_tuple().exponent) for x in (a, b) if Decimal(x).is_finite()]
    step = Decimal(1).scaleb(-max(0, min(exponents, default=0)), context=_ARITHMETIC)
    return bool(_ARITHMETIC.quantize(Decimal(a), step) == _ARITHMETIC.quantize(Decimal(b), step))


def _loose_key(item: Any) -> str:
    value = key(item)
    if isinstance(value, str):
        return "text " + " ".join(value.lower().split())
    return repr(value)


def _negated(value: bool | None) -> bool | None:
    return None if value is None else not value


def _compared(test: Callable[[int], bool]) -> Callable[[Collection, Collection], Collection]:
    def run(left: Collection, right: Collection) -> Collection:
        a, b = singleton(left), singleton(right)
        if a is None or b is None:
            return EMPTY
        verdict = order(a, b)
        return EMPTY if verdict is None else boolean(test(verdict))

    return run


def contained(item: Collection, items: Collection) -> Collection:
    """`item in items`."""
    if len(item) > 1:
        raise CannotJudge("several values stand where `in` can take only one")
    if not item:
        return EMPTY
    return boolean(key(item[0]) in keys(items))


def union(left: Collection, right: Collection) -> Collection:
    """`|`: both collections without doubles."""
    return distinct([*left, *right])


def distinct(items: Collection) -> Collection:
    """The items without doubles, in order."""
    found: dict[Any, Any] = {}
    for item in items:
        found.setdefault(key(item), item)
    return list(found.values())


def _text(items: Collection) -> str:
    value = singleton(items)
    if value is None:
        return ""
    if not isinstance(value, str):
        raise CannotJudge("`&` takes texts only")
    return value


def _concatenated(left: Collection, right: Collection) -> Collection:
    return [_bounded(_text(left) + _text(right))]


def _bounded(text: str) -> str:
    if len(text) > MAX_TEXT:
        raise CannotJudge("a text became too long")
    return text


def _added(left: Collection, right: Collection) -> Collection:
    a, b = singleton(left), singleton(right)
    if isinstance(a, str) and isinstance(b, str):
        return [_bounded(a + b)]
    return arithmetic("+", a, b)


def arithmetic(sign: str, a: Any, b: Any) -> Collection:
    """`+ - * / div mod` of two numbers, or `+ -` of two quantities of one unit.

    Raises:
        CannotJudge: other operands (calendar arithmetic among them).
    """
    if a is None or b is None:
        return EMPTY
    if (
        isinstance(a, Quantity)
        and isinstance(b, Quantity)
        and (a.unit, a.system) == (b.unit, b.system)
        and sign in "+-"
    ):
        return [Quantity(Decimal(value), a.unit, a.system) for value in arithmetic(sign, a.value, b.value)]
    if not is_number(a) or not is_number(b):
        raise CannotJudge(f"`{sign}` is used on values that cannot be reckoned with here")
    if isinstance(a, int) and isinstance(b, int) and sign in ("+", "-", "*") and max(abs(a), abs(b)) < 10**40:
        return [a + b if sign == "+" else a - b if sign == "-" else a * b]
    x, y = Decimal(a), Decimal(b)
    if y == 0 and sign in ("/", "div", "mod"):
        return EMPTY
    result = _DECIMAL[sign](x, y)
    if not result.is_finite():
        return EMPTY
    if sign == "div" or (sign == "mod" and isinstance(a, int) and isinstance(b, int)):
        return [int(result)] if abs(result.adjusted()) < 60 else EMPTY
    return [result]


_DECIMAL: Mapping[str, Callable[[Decimal, Decimal], Decimal]] = {
    "+": _ARITHMETIC.add,
    "-": _ARITHMETIC.subtract,
    "*": _ARITHMETIC.multiply,
    "/": _ARITHMETIC.divide,
    "div": _ARITHMETIC.divide_int,
    "mod": _ARITHMETIC.remainder,
}


def _reckoned(sign: str) -> Callable[[Collection, Collection], Collection]:
    return lambda left, right: arithmetic(sign, singleton(left), singleton(right))


LOGIC: Mapping[str, Callable[[Code, Code], Code]] = {
    "and": both,
    "or": either,
    "implies": implies,
    "xor": exclusive,
}

STRICT: Mapping[str, Callable[[Collection, Collection], Collection]] = {
    "=": lambda left, right: boolean(equals(left, right)),
    "!=": lambda left, right: boolean(_negated(equals(left, right))),
    "~": lambda left, right: boolean(equivalent(left, right)),
    "!~": lambda left, right: boolean(not equivalent(left, right)),
    "<": _compared(lambda verdict: verdict < 0),
    ">": _compared(lambda verdict: verdict > 0),
    "<=": _compared(lambda verdict: verdict <= 0),
    ">=": _compared(lambda verdict: verdict >= 0),
    "|": union,
    "in": contained,
    "contains": lambda left, right: contained(right, left),
    "&": _concatenated,
    "+": _added,
    "-": _reckoned("-"),
    "*": _reckoned("*"),
    "/": _reckoned("/"),
    "div": _reckoned("div"),
    "mod": _reckoned("mod"),
}


def negative(items: Collection) -> Collection:
    """Unary minus."""
    value = singleton(items)
    if value is None:
        return EMPTY
    if isinstance(value, Quantity):
        return [Quantity(-value.value, value.unit, value.system)]
    if not is_number(value):
        raise CannotJudge("`-` stands before something that is no number")
    return [-value]


def is_type(item: Any, name: str, frame: Frame) -> bool:
    """Whether an item is of a type: "Patient", "FHIR.code", "System.String", "string".

    Raises:
        CannotJudge: the target of a reference is not at hand and its type was not written.
    """
    namespace, _, bare = name.rpartition(".")
    if not isinstance(item, Item):
        return namespace in ("", "System") and bare == _system_type(item)
    if namespace == "System":
        return False
    if not item.type_name and item.reference:
        raise CannotJudge("the target of a reference is not at hand, and its type is not written")
    return frame.run.model.is_a(item.type_name, bare)


def _system_type(value: Any) -> str:
    if isinstance(value, bool):
        return "Boolean"
    kinds: tuple[tuple[type, str], ...] = (
        (str, "String"),
        (int, "Integer"),
        (Decimal, "Decimal"),
        (Fraction, "Decimal"),
        (Quantity, "Quantity"),
    )
    for kind, name in kinds:
        if isinstance(value, kind):
            return name
    return {"date": "Date", "dateTime": "DateTime", "time": "Time"}.get(getattr(value, "kind", ""), "")
