"""Invariants as additions to a schema: each makes sure that its invariant holds; it may refuse too much.

A type that carries an invariant not in this table is refused whole by the fast pass. A row holds for the
expression it was written for: another wording under the same key (in another edition) is another row.

Additions: `absent` keys, `required` keys, `any` of some elements, `needs` (a key asks for others),
`excludes` (an element rules out a key), `apart` (codes of components are looked at by `fast_residue`),
`text` (of a primitive), `also` (more asked of an element).
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from fhirgallop.codes.systems import UCUM

Fragment = Mapping[str, Any]

REFUSED: dict[str, Any] = {"not": {}}

# Held by the schema's general form: no contained resource, no extension, no element id, no '#' reference.
GENERAL = frozenset(
    {"ele-1", "ext-1", "dom-2", "dom-3", "dom-4", "dom-5", "dom-r4b", "txt-1", "txt-2", "ref-1"}
)
# A missing narrative is looked for by the fast pass itself.
COUNTED = frozenset({"dom-6"})

_NO_COMPOSITION: Fragment = {"absent": ("composition",)}
_NO_ON_BEHALF_OF: Fragment = {"absent": ("onBehalfOf",)}
_ONE_END: Fragment = {"excludes": (("start", "end"),)}
_LOW_OR_HIGH: Fragment = {"excludes": (("low", "high"),)}
_BOTH: Fragment = {"required": ("numerator", "denominator")}


def _agent(code: str) -> Fragment:
    """An agent whose only coding of type has the code: with two codings, FHIRPath's `=` would not be true."""
    coding = {"items": {"properties": {"code": {"enum": [code]}}, "required": ["code"]}, "maxItems": 1}
    kind = {"properties": {"coding": coding}, "required": ["coding"]}
    return {"contains": {"properties": {"type": kind}, "required": ["type"]}}


_ROWS: tuple[tuple[Fragment, str], ...] = (
    # Observation
    ({"excludes": (("value[x]", "dataAbsentReason"),)}, "dataAbsentReason.empty() or value.empty()"),
    (
        {"apart": True},
        "value.empty() or component.code.where(coding.intersect(%resource.code.coding).exists()).empty()",
    ),
    ({"absent": ("bodyStructure",)}, "bodySite.exists() implies bodyStructure.empty()"),
    ({"any": ("low", "high", "text")}, "low.exists() or high.exists() or text.exists()"),
    # profiles of Observation: our own, and the core's vital signs
    (
        {"any": ("value[x]", "dataAbsentReason"), "excludes": (("value[x]", "dataAbsentReason"),)},
        "value.exists() xor dataAbsentReason.exists()",
    ),
    (
        {"any": ("value[x]", "dataAbsentReason", "component", "hasMember")},
        "(component.empty() and hasMember.empty()) implies (dataAbsentReason.exists() or value.exists())",
    ),
    ({"any": ("value[x]", "dataAbsentReason")}, "value.exists() or dataAbsentReason.exists()"),
    ({"text": {"minLength": 8}}, "($this as dateTime).toString().length() >= 8"),
    ({"text": {"minLength": 8}}, "$this is dateTime implies $this.toString().length() >= 10"),
    (
        {
            "also": {
                "valueQuantity": {"properties": {"system": {"enum": [UCUM]}}, "required": ["system", "code"]}
            }
        },
        "value.ofType(Quantity).all(system = 'http://unitsofmeasure.org' and code.exists())",
    ),
    (
        {"also": {"agent": {"allOf": [_agent("author"), _agent("assembler")]}}},
        """agent.where(type.coding.code = 'author').exists() and
        agent.where(type.coding.code = 'assembler').exists()""",
    ),
    # DiagnosticReport and Provenance (R5): what would have to be followed is not let in
    (
        _NO_COMPOSITION,
        """composition.exists() implies (composition.resolve().section.entry.reference.where(resolve() is
        Observation) in (result.reference|result.reference.resolve().hasMember.reference))""",
    ),
    (
        _NO_ON_BEHALF_OF,
        """who.resolve().exists() and onBehalfOf.resolve().exists() implies
        who.resolve() != onBehalfOf.resolve()""",
    ),
    (
        _NO_ON_BEHALF_OF,
        """who.resolve().ofType(PractitionerRole).practitioner.resolve().exists() and
        onBehalfOf.resolve().ofType(Practitioner).exists() implies
        who.resolve().practitioner.resolve() != onBehalfOf.resolve()""",
    ),
    (
        _NO_ON_BEHALF_OF,
        """who.resolve().ofType(Organization).exists() and
        onBehalfOf.resolve().ofType(PractitionerRole).organization.resolve().exists() implies
        who.resolve() != onBehalfOf.resolve().organization.resolve()""",
    ),
    # Quantity, SimpleQuantity
    ({"needs": {"code": ("system",)}}, "code.empty() or system.exists()"),
    ({"absent": ("comparator",)}, "comparator.empty()"),
    # Range and Period: two ends would have to be compared
    (_LOW_OR_HIGH, "low.empty() or high.empty() or (low <= high)"),
    (
        _LOW_OR_HIGH,
        """low.value.empty() or high.value.empty() or
        low.lowBoundary().comparable(high.highBoundary()).not() or
        (low.lowBoundary() <= high.highBoundary())""",
    ),
    (_ONE_END, "start.hasValue().not() or end.hasValue().not() or (start <= end)"),
    (
        _ONE_END,
        "start.hasValue().not() or end.hasValue().not() or (start.lowBoundary() <= end.highBoundary())",
    ),
    # Ratio
    (_BOTH, "(numerator.empty() xor denominator.exists()) and (numerator.exists() or extension.exists())"),
    (
        _BOTH,
        """(numerator.exists() and denominator.exists()) or (numerator.empty() and denominator.empty() and
        extension.exists())""",
    ),
    # Attachment, ContactPoint
    ({"needs": {"data": ("contentType",)}}, "data.empty() or contentType.exists()"),
    ({"needs": {"value": ("system",)}}, "value.empty() or system.exists()"),
    # of R5: what Reference, Coding and Identifier say at least
    (
        {"any": ("reference", "identifier", "display")},
        "reference.exists() or identifier.exists() or display.exists() or extension.exists()",
    ),
    ({"required": ("code",)}, "code.exists().not() implies display.exists().not()"),
    ({"required": ("value",)}, "value.exists()"),
)
FRAGMENTS: Mapping[str, Fragment] = {" ".join(text.split()): addition for addition, text in _ROWS}


def fragment(key: str, expression: str) -> Fragment | None:
    """What to add to a type's schema so that the invariant holds; None when no row can make it hold."""
    if key in GENERAL or key in COUNTED:
        return {}
    return FRAGMENTS.get(" ".join(expression.split()))
