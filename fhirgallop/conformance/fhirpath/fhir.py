# ruff: noqa: ARG001 - all compiled code has one signature, whether it looks at everything or not
"""Functions that FHIR adds to FHIRPath, boundaries, and what can only be said not to be judged.

Sources: FHIR R4 and R5, fhirpath.html ("Additional functions"); FHIRPath v3.0.0 (lowBoundary, highBoundary,
precision, comparable).
"""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping, Sequence
from decimal import Decimal
from typing import Any

from fhirgallop.conformance import xhtml
from fhirgallop.conformance.editions.edition import SD
from fhirgallop.conformance.fhirpath.frame import Code, Frame, argument
from fhirgallop.conformance.fhirpath.function import Body, Function, integer_argument, text_argument
from fhirgallop.conformance.fhirpath.items import CannotJudge, Collection, Item, is_number, singleton
from fhirgallop.conformance.fhirpath.model import member
from fhirgallop.conformance.fhirpath.operators import EMPTY, FALSE, TRUE, boolean
from fhirgallop.conformance.fhirpath.quantity import Quantity
from fhirgallop.conformance.fhirpath.temporal import Temporal

Arguments = Sequence[Code]

_TYPED_REFERENCE = re.compile(
    r"(?:.*/)?([A-Z][A-Za-z]{1,60})(?:/[^/?#]{1,200}(?:/_history/[^/]{1,200})?|\?.*)", re.DOTALL
)
_MAX_REFERENCE = 2_000

# How many parts a precision keeps, by the number of digits that FHIRPath counts (20140101 -> 8).
_PARTS: Mapping[str, Mapping[int, int]] = {
    "date": {4: 1, 6: 2, 8: 3},
    "dateTime": {4: 1, 6: 2, 8: 3, 10: 4, 12: 5, 14: 6, 17: 6},
    "time": {2: 1, 4: 2, 6: 3, 9: 3},
}
_DECIMAL_DIGITS = 8
_MOST_DECIMAL_DIGITS = 28


def has_value(item: Any) -> bool:
    """True for a primitive that has a value, whatever its extensions."""
    if not isinstance(item, Item):
        return True
    return item.value is not None and not isinstance(item.value, dict | list)


def _has_value(focus: Collection, frame: Frame, args: Arguments) -> Collection:
    return boolean(len(focus) == 1 and has_value(focus[0]))


def _get_value(focus: Collection, frame: Frame, args: Arguments) -> Collection:
    if len(focus) != 1 or not has_value(focus[0]):
        return EMPTY
    value = singleton(focus)
    return EMPTY if value is None else [value]


def _extension(focus: Collection, frame: Frame, args: Arguments) -> Collection:
    url = text_argument(args[0], frame)
    found: Collection = []
    for item in focus:
        if isinstance(item, Item):
            member(item, "extension", frame.run.model, found)
    return [part for part in found if isinstance(part.value, dict) and part.value.get("url") == url]


def _resolve(focus: Collection, frame: Frame, args: Arguments) -> Collection:
    return [target for item in focus if (target := _target(item, frame)) is not None]


def _target(item: Any, frame: Frame) -> Item | None:
    """What a Reference, canonical or uri points to: the resource at hand, else a stand-in of its type."""
    value = item.value if isinstance(item, Item) else item
    stated = value.get("type") if isinstance(value, dict) else None
    reference = value.get("reference") if isinstance(value, dict) else value
    if not isinstance(reference, str) or not reference:
        return None
    owner = item.owner if isinstance(item, Item) else None
    owner = frame.run.node.resource if owner is None else owner
    node = frame.run.scope.resolve(owner, reference)
    if node is not None:
        return Item.of(node)
    if reference.startswith("#"):
        return None  # ref-1 says that it is missing
    match = _TYPED_REFERENCE.fullmatch(reference) if len(reference) <= _MAX_REFERENCE else None
    kind = match[1] if match is not None else stated if isinstance(stated, str) else ""
    known = frame.run.model.edition.type(kind) is not None
    return Item(None, None, kind if known else "", owner, reference)


def _member_of(focus: Collection, frame: Frame, args: Arguments) -> Collection:
    url = text_argument(args[0], frame)
    if not focus or url is None:
        return EMPTY
    value_set = frame.run.model.edition.value_set(url)
    if value_set is None:
        raise CannotJudge("a value set of the rule is not loaded or cannot be enumerated")
    if len(focus) > 1:
        raise CannotJudge("several values stand where `memberOf` can take only one")
    value = focus[0].value if isinstance(focus[0], Item) else focus[0]
    if isinstance(value, str):
        return boolean(value_set.has(None, value))
    codings = value.get("coding", [value]) if isinstance(value, dict) else []
    return boolean(
        any(
            isinstance(coding.get("code"), str) and value_set.has(coding.get("system"), coding["code"])
            for coding in (codings if isinstance(codings, list) else [])
            if isinstance(coding, dict) and isinstance(coding.get("system", ""), str)
        )
    )


def _conforms_to(focus: Collection, frame: Frame, args: Arguments) -> Collection:
    url = text_argument(args[0], frame)
    if not focus or url is None:
        return EMPTY
    name = url.partition("|")[0].removeprefix(SD)
    if len(focus) > 1 or "/" in name or frame.run.model.edition.type(name) is None:
        raise CannotJudge("`conformsTo` names a profile that is not judged inside an expression")
    return boolean(isinstance(focus[0], Item) and frame.run.model.is_a(focus[0].type_name, name))


def _html_checks(focus: Collection, frame: Frame, args: Arguments) -> Collection:
    value = singleton(focus)
    if value is None:
        return EMPTY
    return boolean(isinstance(value, str) and next(xhtml.check(value, ""), None) is None)


def _boundary(*, high: bool) -> Body:
    def run(focus: Collection, frame: Frame, args: Arguments) -> Collection:
        value = singleton(focus)
        digits = integer_argument(args[0], frame) if args else None
        if value is None:
            return EMPTY
        if isinstance(value, Quantity):
            edge = _decimal_boundary(value.value, digits, high=high)
            return EMPTY if edge is None else [Quantity(edge, value.unit, value.system)]
        if is_number(value):
            edge = _decimal_boundary(Decimal(value), digits, high=high)
            return EMPTY if edge is None else [edge]
        return _temporal_boundary(value, digits, high=high) if isinstance(value, Temporal) else EMPTY

    return run


def _temporal_boundary(value: Temporal, digits: int | None, *, high: bool) -> Collection:
    edge = value.boundary(high=high)
    if digits is None:
        return [edge]
    parts = _PARTS[edge.kind].get(digits)
    if parts is None:
        return EMPTY
    return [Temporal(edge.kind, edge.parts[:parts], edge.zone if parts > 3 else None)]


def _decimal_boundary(number: Decimal, digits: int | None, *, high: bool) -> Decimal | None:
    """Half a unit of the last written digit below or above, to so many decimals (8 unless said otherwise)."""
    digits = _DECIMAL_DIGITS if digits is None else digits
    if not number.is_finite() or not 0 <= digits <= _MOST_DECIMAL_DIGITS or abs(number.adjusted()) > 100:
        return None
    written = -int(number.as_tuple().exponent)
    if written > 100:
        return None
    half = Decimal(5).scaleb(-written - 1)
    edge = number + half if high else number - half
    if written + 1 <= digits:
        return edge
    return edge.quantize(Decimal(1).scaleb(-digits), rounding="ROUND_CEILING" if high else "ROUND_FLOOR")


def _precision(focus: Collection, frame: Frame, args: Arguments) -> Collection:
    value = singleton(focus)
    if isinstance(value, Temporal):
        digits = sum(len(str(int(part)).zfill(2)) for part in value.parts)
        fraction = str(value.parts[-1]).partition(".")[2]
        return [digits + len(fraction)]
    if is_number(value):
        return [max(0, -int(Decimal(value).as_tuple().exponent))]
    return EMPTY


def _comparable(focus: Collection, frame: Frame, args: Arguments) -> Collection:
    left, right = singleton(focus), singleton(argument(args[0], frame))
    if left is None or right is None:
        return EMPTY
    if not isinstance(left, Quantity) or not isinstance(right, Quantity):
        return FALSE
    return TRUE if left.comparable(right) else FALSE


def _unjudged(reason: str) -> Callable[[Collection, Frame, Arguments], Collection]:
    def run(focus: Collection, frame: Frame, args: Arguments) -> Collection:
        raise CannotJudge(reason)

    return run


_NO_CLOCK = "the rule asks for the present time, and no clock is handed in"
_NO_TERMINOLOGY = "the rule asks a terminology that is not loaded"
_NO_DEFINITION = "the rule asks for definitions that expressions have no access to"

FUNCTIONS: Mapping[str, Function] = {
    "hasValue": Function(_has_value),
    "getValue": Function(_get_value),
    "extension": Function(_extension, 1, 1),
    "resolve": Function(_resolve),
    "memberOf": Function(_member_of, 1, 1),
    "conformsTo": Function(_conforms_to, 1, 1),
    "htmlChecks": Function(_html_checks),
    "lowBoundary": Function(_boundary(high=False), 0, 1),
    "highBoundary": Function(_boundary(high=True), 0, 1),
    "precision": Function(_precision),
    "comparable": Function(_comparable, 1, 1),
    "now": Function(_unjudged(_NO_CLOCK)),
    "today": Function(_unjudged(_NO_CLOCK)),
    "timeOfDay": Function(_unjudged(_NO_CLOCK)),
    "subsumes": Function(_unjudged(_NO_TERMINOLOGY), 1, 1),
    "subsumedBy": Function(_unjudged(_NO_TERMINOLOGY), 1, 1),
    "elementDefinition": Function(_unjudged(_NO_DEFINITION)),
    "slice": Function(_unjudged(_NO_DEFINITION), 2, 2),
    "checkModifiers": Function(_unjudged(_NO_DEFINITION), 0, 99),
}
