"""Decides from the presence of elements alone that a rule holds, before anything is evaluated.

Most invariants say that elements exclude or need one another (`value.empty() or dataAbsentReason.empty()`)
or begin with such a condition. For these a look at the keys of the JSON object is enough in the usual case.
`surely` is only ever a short cut: where it does not answer True, the compiled expression is asked.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any

from fhirgallop.conformance.fhirpath.model import Field
from fhirgallop.conformance.fhirpath.syntax import Binary, Call, Item, Member, Tree, TypeTest

Object = Mapping[str, Any]
Answer = Callable[[Object], bool | None]
"""True or False when presence alone decides, None otherwise."""

# what these give for an empty collection is known without looking at their arguments
_EMPTY_STAYS_EMPTY = frozenset((
    "as", "children", "descendants", "distinct", "exclude", "extension", "first", "intersect", "last",
    "ofType", "repeat", "resolve", "select", "single", "skip", "tail", "take", "trace", "where",
))  # fmt: skip
_TRUE_FOR_NONE = frozenset(("empty", "all", "allTrue", "allFalse", "isDistinct"))
_FALSE_FOR_NONE = frozenset(("exists", "anyTrue", "anyFalse", "hasValue"))


def surely(tree: Tree, fields: Mapping[str, Field]) -> Answer | None:
    """The short cut for a rule at a type with these fields; None when presence says nothing about it."""
    match tree:
        case Binary("and" | "or" | "implies" | "xor" | "=" | "!=" as operator, left, right):
            return _joined(operator, surely(left, fields), surely(right, fields))
        case Call(base, "not", ()) if base is not None:
            inner = surely(base, fields)
            return None if inner is None else _negated(inner)
        case Call(Member(None, name), "exists" | "empty" as test, ()):
            there = _there(name, fields)
            return there if there is None or test == "exists" else _negated(there)
        case Call(base, name, _) if name in _TRUE_FOR_NONE or name in _FALSE_FOR_NONE:
            start = None if base is None else _start(base)
            there = None if start is None else _there(start, fields)
            return None if there is None else _for_none(there, name in _TRUE_FOR_NONE)
    return None


def _start(tree: Tree) -> str | None:
    """The element without which the whole path is empty."""
    match tree:
        case Member(None, name):
            return name
        case Member(base, _) | Item(base, _) | TypeTest("as", base, _) if base is not None:
            return _start(base)
        case Call(base, name, _) if base is not None and name in _EMPTY_STAYS_EMPTY:
            return _start(base)
    return None


def _there(name: str, fields: Mapping[str, Field]) -> Answer | None:
    field = fields.get(name)
    if field is None:
        return None
    keys = tuple(key for key, _, _ in field.keys)
    companions = tuple("_" + key for key, _, primitive in field.keys if primitive)

    def there(value: Object) -> bool:
        for key in keys:
            found = value.get(key)
            if found is not None and (not isinstance(found, list) or any(part is not None for part in found)):
                return True
        for key in companions:
            found = value.get(key)
            if isinstance(found, dict) or (
                isinstance(found, list) and any(isinstance(part, dict) for part in found)
            ):
                return True
        return False

    return there


def _for_none(there: Answer, verdict: bool) -> Answer:
    return lambda value: None if there(value) else verdict


def _negated(inner: Answer) -> Answer:
    def run(value: Object) -> bool | None:
        answer = inner(value)
        return None if answer is None else not answer

    return run


def _joined(operator: str, left: Answer | None, right: Answer | None) -> Answer | None:
    if operator == "implies" and left is not None:
        left = _negated(left)
    if operator in ("or", "implies"):
        return _decided_by(True, left, right)
    if operator == "and":
        return _decided_by(False, left, right)
    if left is None or right is None:
        return None
    same = operator == "="

    def compared(value: Object) -> bool | None:
        a, b = left(value), right(value)
        return None if a is None or b is None else (a is b) is same

    return compared


def _decided_by(decisive: bool, left: Answer | None, right: Answer | None) -> Answer | None:
    """One side that is decisive decides; else both must be known."""
    if left is None or right is None:
        only = left if right is None else right
        if only is None:
            return None

        def one(value: Object) -> bool | None:
            return decisive if only(value) is decisive else None

        return one

    def both(value: Object) -> bool | None:
        a = left(value)
        if a is decisive:
            return decisive
        b = right(value)
        if b is decisive:
            return decisive
        return None if a is None or b is None else not decisive

    return both
