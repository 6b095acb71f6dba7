"""Invariants of the core's own profiles, run as a profile's invariants are.

The expressions are those of the core packages (CC0-1.0): vital signs, ValueSet and CodeSystem profiles.
"""

from __future__ import annotations

from typing import Any

import pytest

from fhirgallop.conformance import invariants, references
from fhirgallop.conformance.editions.edition import load
from fhirgallop.conformance.editions.model import Invariant
from fhirgallop.conformance.node import Node, Scope

VS_1 = "($this as dateTime).toString().length() >= 8"
VS_2 = "(component.empty() and hasMember.empty()) implies (dataAbsentReason.exists() or value.exists())"
RULES_TEXT = "http://hl7.org/fhir/StructureDefinition/valueset-rules-text"
CVS_1 = (
    f"extension('{RULES_TEXT}').exists() xor "
    "extension('http://hl7.org/fhir/StructureDefinition/valueset-expression').exists() xor compose.exists()"
)
EVS_1 = "contains.version.exists() xor  parameter.where(name = 'system-version').exists()"
SCS_2 = "content in ( 'example' | 'fragment' | 'complete' ) implies concept.exists()"
MQTY_1 = "(code.exists() or value.empty()) and (system.empty() or system = 'urn:iso:std:iso:4217')"


def _node(value: Any, type_name: str, key: str, edition: str) -> Node:
    root = Node(value, type_name)
    if not key:
        return root
    place = load(edition).child(type_name, key)
    assert place is not None
    return root.child(value.get(key), value.get("_" + key), place, key, None)


def _holds(key: str, expression: str, node: Node, edition: str) -> bool:
    scope = Scope(load(edition), node.resource, references.resolver(node.resource, load(edition)))
    issues = list(invariants.check_one(node, Invariant(key, "error", expression, "Human words."), scope))
    assert all(issue.rule == key and issue.text.startswith("Human words.") for issue in issues)
    return not issues


@pytest.mark.parametrize("edition", ["R4", "R4B", "R5"])
@pytest.mark.parametrize(
    ("key", "value", "holds"),
    [
        ("effectiveDateTime", {"effectiveDateTime": "2020-01-01"}, True),
        ("effectiveDateTime", {"effectiveDateTime": "2020-01-01T10:00:00Z"}, True),
        ("effectiveDateTime", {"effectiveDateTime": "2020-01"}, False),
        ("effectiveDateTime", {"effectiveDateTime": "2020"}, False),
        (
            "effectiveDateTime",
            {"_effectiveDateTime": {"extension": [{"url": "u", "valueCode": "unknown"}]}},
            True,
        ),
        (
            "effectivePeriod",
            {"effectivePeriod": {"start": "2020"}},
            True,
        ),  # the rule is about a dateTime only
    ],
)
def test_vital_sign_is_precise_to_the_day(key: str, value: dict[str, Any], holds: bool, edition: str) -> None:
    node = _node({"resourceType": "Observation", **value}, "Observation", key, edition)
    assert _holds("vs-1", VS_1, node, edition) is holds


@pytest.mark.parametrize(
    ("key", "expression", "type_name", "value", "holds"),
    [
        ("vs-2", VS_2, "Observation", {"valueString": "a"}, True),
        ("vs-2", VS_2, "Observation", {"component": [{"code": {"text": "a"}}]}, True),
        ("vs-2", VS_2, "Observation", {}, False),
        ("cvs-1", CVS_1, "ValueSet", {"compose": {"include": [{"system": "a"}]}}, True),
        ("cvs-1", CVS_1, "ValueSet", {"extension": [{"url": RULES_TEXT, "valueMarkdown": "a"}]}, True),
        ("cvs-1", CVS_1, "ValueSet", {}, False),
        ("evs-1", EVS_1, "ValueSet.expansion", {"contains": [{"version": "1"}]}, True),
        ("evs-1", EVS_1, "ValueSet.expansion", {"parameter": [{"name": "system-version"}]}, True),
        ("evs-1", EVS_1, "ValueSet.expansion", {"contains": [{"code": "a"}]}, False),
        ("scs-2", SCS_2, "CodeSystem", {"content": "complete", "concept": [{"code": "a"}]}, True),
        ("scs-2", SCS_2, "CodeSystem", {"content": "not-present"}, True),
        ("scs-2", SCS_2, "CodeSystem", {"content": "complete"}, False),
        ("mqty-1", MQTY_1, "Quantity", {"value": 1, "code": "EUR", "system": "urn:iso:std:iso:4217"}, True),
        ("mqty-1", MQTY_1, "Quantity", {"value": 1, "code": "EUR", "system": "http://a.example"}, False),
    ],
)
def test_rules_of_core_profiles(
    key: str, expression: str, type_name: str, value: dict[str, Any], holds: bool
) -> None:
    assert _holds(key, expression, _node(value, type_name, "", "R5"), "R5") is holds
