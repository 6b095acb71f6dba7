"""Faults put anywhere into the published examples: each is found by its rule, at the node that was spoilt."""

from __future__ import annotations

import json
import random
from collections import Counter
from collections.abc import Callable, Iterator
from copy import deepcopy
from pathlib import Path
from typing import Any

import pytest

from fhirgallop.conformance import validate
from fhirgallop.conformance.registry import registry
from fhirgallop.conformance.source import read
from fhirgallop.conformance.validator import thorough

PUBLISHED = Path(__file__).parents[1] / "published"
EACH = 3  # faults of a kind in one example
Spot = tuple[Any, Any]  # an object or array, and the key or index in it
Spoil = Callable[[Spot], tuple[str, Any]]


def _spots(value: Any) -> Iterator[Spot]:
    items = value.items() if isinstance(value, dict) else enumerate(value) if isinstance(value, list) else ()
    for key, inner in items:
        yield value, key
        yield from _spots(inner)


def _unknown(spot: Spot) -> tuple[str, Any]:
    spot[0][spot[1]]["noSuchElement"] = 1
    return "unknown-element", spot[0][spot[1]]


def _null(spot: Spot) -> tuple[str, Any]:
    spot[0][spot[1]] = None
    return "json-null", spot[0]


def _no_items(spot: Spot) -> tuple[str, Any]:
    spot[0][spot[1]] = []
    return "json-array-empty", spot[0]


def _no_text(spot: Spot) -> tuple[str, Any]:
    spot[0][spot[1]] = ""
    return "primitive-empty", ""


def _no_children(spot: Spot) -> tuple[str, Any]:
    resource = "resourceType" in spot[0][spot[1]]
    spot[0][spot[1]] = {}
    return "resource-type-missing" if resource else "ele-1", spot[0][spot[1]]


def _in_object(spot: Spot) -> bool:
    return isinstance(spot[0], dict) and spot[1] != "resourceType"


KINDS: dict[str, tuple[Callable[[Spot], bool], Spoil]] = {
    "unknown element": (lambda s: isinstance(s[0][s[1]], dict) and not str(s[1]).startswith("_"), _unknown),
    "null": (_in_object, _null),
    "empty array": (lambda s: _in_object(s) and isinstance(s[0][s[1]], list), _no_items),
    "empty text": (lambda s: s[1] != "resourceType" and isinstance(s[0][s[1]], str), _no_text),
    "empty object": (lambda s: isinstance(s[0][s[1]], dict) and not str(s[1]).startswith("_"), _no_children),
}


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("edition", ["R4", "R4B", "R5"])
def test_a_fault_anywhere_is_found_where_it_is(edition: str, kind: str, nodes_at: Any) -> None:
    dice = random.Random(f"{kind} {edition}")
    fits, spoil = KINDS[kind]
    types: Counter[str] = Counter()
    for file in sorted(PUBLISHED.glob(f"{edition}-*.json")):
        sound = json.loads(file.read_bytes())
        count = sum(fits(spot) for spot in _spots(sound))
        for number in dice.sample(range(count), min(EACH, count)):
            resource = deepcopy(sound)
            spot = [spot for spot in _spots(resource) if fits(spot)][number]
            rule, spoilt = spoil(spot)
            issues = validate(resource, edition)
            assert issues == thorough(read(resource), registry(edition))
            places = [i.expression for i in issues if i.rule == rule]
            found = [v for p in places for n in nodes_at(resource, p) for v in (n.value, n.companion)]
            assert any(value is spoilt for value in found), (file.name, spot[1])
            text = validate(json.dumps(resource), edition)
            assert {(i.rule, i.expression) for i in text} == {(i.rule, i.expression) for i in issues}
            assert all(issue.line for issue in text)
            types[sound["resourceType"]] += 1
    assert len(types) >= 25
    assert types.total() >= 60
