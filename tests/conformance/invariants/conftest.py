"""Reads the case file and walks to the nodes a case is about."""

from __future__ import annotations

import json
from collections.abc import Callable, Iterator
from decimal import Decimal
from pathlib import Path
from typing import Any

import pytest

from fhirgallop.conformance import references, structure
from fhirgallop.conformance.editions.edition import Edition
from fhirgallop.conformance.node import Node, Scope

CASES = Path(__file__).with_name("cases.jsonl")


def walk(root: Node, edition: Edition) -> Iterator[Node]:
    """The root and every node below it."""
    stack = [root]
    while stack:
        node = stack.pop()
        yield node
        opens = structure.open_node if isinstance(node.value, dict) else structure.open_primitive
        stack.extend(reversed(opens(node, edition, [])))


@pytest.fixture
def nodes_of() -> Callable[[dict[str, Any], Any, Edition], list[tuple[Node, Scope]]]:
    """The nodes that a case is about, in one of its two values."""

    def find(case: dict[str, Any], value: Any, edition: Edition) -> list[tuple[Node, Scope]]:
        root = Node(value, case["root"])
        scope = Scope(edition, root, references.resolver(root, edition))
        if "child" not in case and case["root"] == case["at"]:
            return [(root, scope)]
        if "child" not in case:
            return [(n, scope) for n in walk(root, edition) if n.type_name == case["at"]]
        place = edition.child(case["at"], case["child"])
        assert place is not None
        return [
            (n, scope) for n in walk(root, edition) if n.element is place.element and n.parent is not None
        ]

    return find


@pytest.fixture
def walk_nodes() -> Callable[[Node, Edition], Iterator[Node]]:
    return walk


def read_cases() -> list[dict[str, Any]]:
    return [json.loads(line, parse_float=Decimal) for line in CASES.read_text(encoding="utf-8").splitlines()]


@pytest.fixture(scope="session")
def cases() -> list[dict[str, Any]]:
    return read_cases()
