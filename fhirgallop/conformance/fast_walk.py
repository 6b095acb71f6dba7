"""Where the fast pass walks after all: a few doubtful entries of a Bundle, and narratives that are missing.

A missing narrative is only a warning (dom-6), so it does not send the whole resource the thorough way.
"""

from __future__ import annotations

from functools import lru_cache
from typing import Any

from fhirgallop.conformance import invariants, references, structure, walk
from fhirgallop.conformance.node import Node
from fhirgallop.conformance.registry import Registry
from fhirgallop.conformance.source import exact
from fhirgallop.outcome import Issue

_DOM_6 = "dom-6"


def judged_well(value: dict[str, Any], text: bytes | None, places: list[int], known: Registry) -> bool:
    """Whether the walk finds nothing wrong with the resources of these entries."""
    root = Node(value if text is None else exact(text).value, "Bundle")
    scope = references.scope_of(root, known.edition)
    issues: list[Issue] = []
    entries = [n for n in structure.open_node(root, known.edition, issues) if n.key == "entry"]
    for place in places:
        for node in structure.open_node(entries[place], known.edition, issues):
            if node.key == "resource" and next(walk.judge(node, known, scope), None) is not None:
                return False
    return not issues


def without_narrative(value: dict[str, Any], places: list[str], known: Registry) -> list[Issue] | None:
    """The issues of the missing narratives, each as the walk words it."""
    root = Node(value, str(value["resourceType"]))
    scope = references.scope_of(root, known.edition)
    issues: list[Issue] = []
    nodes = [root]
    if root.type_name == "Bundle":
        nodes = [
            child
            for entry in structure.open_node(root, known.edition, issues)
            if entry.key == "entry"
            for child in structure.open_node(entry, known.edition, issues)
            if child.key == "resource"
        ]
    wanted = frozenset(places)
    for node in nodes:
        if node.expression in wanted:
            found = [i for i in invariants.check(node, scope) if i.rule == _DOM_6]
            issues.extend(found)
    return issues


@lru_cache(maxsize=8)
def no_narrative(known: Registry) -> frozenset[str]:
    """Resource types that no invariant asks a narrative of (Bundle, Binary, Parameters)."""
    return frozenset(
        name
        for name in known.edition.resources
        if all(i.key != _DOM_6 for i in getattr(known.edition.type(name), "invariants", ()))
    )
