"""Invariants decided by an index: the verdict is that of the published expression."""

from __future__ import annotations

from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from fhirgallop.conformance import indexed_rules, invariants
from fhirgallop.conformance.editions import load
from fhirgallop.conformance.node import Node
from fhirgallop.conformance.references import scope_of
from fhirgallop.conformance.structure import open_node

CODING = st.fixed_dictionaries({}, optional={"system": st.sampled_from("ab"), "code": st.sampled_from("12")})
CONCEPT = st.fixed_dictionaries({}, optional={"coding": st.lists(CODING, max_size=2), "text": st.just("x")})
REFERENCE = st.sampled_from(["#a", "#b", "#", "Patient/1", "#a b"])


@st.composite
def resources(draw: st.DrawFn) -> dict[str, Any]:
    """An Observation with what the rules look at."""
    resource: dict[str, Any] = {"resourceType": "Observation", "code": draw(CONCEPT)}
    if draw(st.booleans()):
        resource["valueString"] = "x"
    resource["component"] = [{"code": draw(CONCEPT)} for _ in range(draw(st.integers(0, 2)))]
    resource["contained"] = [
        {"resourceType": "Patient", "id": i} for i in draw(st.lists(st.sampled_from("ab"), max_size=2))
    ]
    resource["performer"] = [{"reference": r} for r in draw(st.lists(REFERENCE, max_size=3))]
    return resource


@pytest.mark.parametrize("edition", ["R4", "R4B", "R5"])
@given(resource=resources())
@settings(max_examples=150, deadline=None)
def test_the_index_says_what_the_expression_says(edition: str, resource: dict[str, Any]) -> None:
    definitions = load(edition)
    root = Node(resource, "Observation")
    scope = scope_of(root, definitions)
    performers = [n for n in open_node(root, definitions, []) if n.key == "performer"]
    for node in (root, *performers):
        definition = definitions.type(node.type_name)
        for invariant in definition.invariants if definition else ():
            verdict = indexed_rules.verdict_by_index(invariant.key, node, scope)
            if verdict is not None:
                assert verdict is not bool(list(invariants.check_one(node, invariant, scope)))


@pytest.mark.parametrize("value", [None, [], "x", {"component": [None]}, {"component": 1}, {"reference": 1}])
def test_what_has_the_wrong_shape_is_left_to_the_expression(value: Any) -> None:
    node = Node(value, "Observation")
    scope = scope_of(Node({}, "Observation"), load("R4"))
    for key in ("ref-1", "obs-7", "prov-1"):
        assert indexed_rules.verdict_by_index(key, node, scope) is None
