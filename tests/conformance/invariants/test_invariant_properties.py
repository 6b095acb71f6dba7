"""Laws: the short cut never contradicts the compiled rule, and no JSON value makes a rule raise."""

from __future__ import annotations

import json
import random
from typing import Any

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from fhirgallop.conformance import invariants, references
from fhirgallop.conformance.editions.edition import NAMES, Edition, load
from fhirgallop.conformance.fhirpath.items import CannotJudge
from fhirgallop.conformance.node import Node, Scope

ODD = [
    None,
    [],
    {},
    "",
    "a",
    0,
    False,
    [None],
    [{}],
    [[]],
    {"extension": []},
    [None, {"id": "a"}],
    {"id": "a"},
    -1.5,
]


def _objects(edition: Edition, type_name: str, dice: random.Random) -> list[dict[str, Any]]:
    keys = list(edition.type(type_name).keys)
    made = []
    for _ in range(12):
        chosen = dice.sample(keys, min(len(keys), dice.randint(0, 6)))
        made.append({key: dice.choice(ODD) for key in chosen})
    return made


@pytest.mark.parametrize("name", NAMES)
def test_short_cut_says_what_the_compiled_rule_says(name: str) -> None:
    edition = load(name)
    dice = random.Random(7)
    compared = 0
    for type_name in sorted(edition.types):
        rules = [
            rule for rule in invariants._rules_of_type(edition, type_name) if rule.surely and rule.expression
        ]
        for value in _objects(edition, type_name, dice) if rules else ():
            node = Node(value, type_name)
            scope = Scope(edition, node, references.resolver(node, edition))
            for rule in rules:
                if rule.surely(value):
                    compared += 1
                    assert rule.expression.verdict(node, scope) == "true", (rule.invariant.key, value)
    assert compared > 3000


@pytest.mark.parametrize("name", NAMES)
def test_most_rules_have_a_short_cut(name: str) -> None:
    edition = load(name)
    hot = {
        "obs-6",
        "obs-7",
        "dom-2",
        "dom-3",
        "dom-4",
        "dom-5",
        "ext-1",
        "per-1",
        "qty-3",
        "att-1",
        "tim-1",
        "bdl-1",
    }
    types = ("Observation", "Extension", "Period", "Quantity", "Attachment", "Timing.repeat", "Bundle")
    ready = {
        rule.invariant.key for t in types for rule in invariants._rules_of_type(edition, t) if rule.surely
    }
    assert hot <= ready


NAMES_IN_RULES = [
    *("id", "extension", "value", "code", "system", "coding", "reference", "start", "end", "low", "high"),
    *(
        "entry",
        "resource",
        "resourceType",
        "contained",
        "type",
        "item",
        "linkId",
        "valueQuantity",
        "_birthDate",
        "url",
    ),
]
leaves = (
    st.none()
    | st.booleans()
    | st.integers()
    | st.floats(allow_nan=False)
    | st.decimals(allow_nan=False)
    | st.text(max_size=8)
)
json_values = st.recursive(
    leaves,
    lambda inner: (
        st.lists(inner, max_size=3) | st.dictionaries(st.sampled_from(NAMES_IN_RULES), inner, max_size=4)
    ),
    max_leaves=20,
)


@pytest.mark.parametrize("name", NAMES)
@settings(max_examples=150, deadline=None, suppress_health_check=[HealthCheck.too_slow])
@given(data=st.data())
def test_no_value_makes_a_rule_raise(name: str, data: st.DataObject) -> None:
    edition = load(name)
    type_name = data.draw(st.sampled_from(sorted(edition.types)))
    keys = sorted(edition.type(type_name).keys) or ["id"]
    value = data.draw(st.dictionaries(st.sampled_from(keys), json_values, max_size=6) | json_values)
    node = Node(value, type_name)
    scope = Scope(edition, node, references.resolver(Node({}, "Patient"), edition))
    for issue in invariants.check(node, scope):
        assert issue.severity in ("error", "warning")


@pytest.mark.parametrize("name", NAMES)
def test_damaged_cases_never_raise(name: str, cases: list[dict[str, Any]], nodes_of: Any) -> None:
    """Every value of the case file with one part replaced by something odd."""
    edition = load(name)
    dice = random.Random(11)
    for case in cases:
        if name not in case["editions"] or not isinstance(case["fails"], dict):
            continue
        value = json.loads(json.dumps(case["fails"], default=float))
        _damage(value, dice)
        for node, scope in nodes_of(
            {**case, "at": case["root"]} if "child" not in case else case, value, edition
        ):
            try:
                list(invariants.check(node, scope))
            except CannotJudge as reason:  # pragma: no cover - it must never come out
                pytest.fail(str(reason))


def _damage(value: Any, dice: random.Random) -> None:
    keys = [key for key in value if key != "resourceType"]
    if not keys:
        return
    key = dice.choice(keys)
    if isinstance(value[key], dict) and value[key] and dice.random() < 0.6:
        _damage(value[key], dice)
    else:
        value[key] = dice.choice(ODD)
