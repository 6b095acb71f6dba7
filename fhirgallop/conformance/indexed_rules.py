"""Invariants that look through a whole resource at every node, decided by an index instead.

The verdict is the expression's; the time is linear in the resource, where the expression's is quadratic.
Source: the expressions of ref-1 (Reference), obs-7 (Observation) and prov-1 (Provenance.agent, R5).
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from typing import Any

import orjson

from fhirgallop.conformance.node import Node, Scope


def verdict_by_index(key: str, node: Node, scope: Scope) -> bool | None:
    """Whether the invariant of that key holds at a node; None when its expression has to be run."""
    rule = _RULES.get(key)
    return None if rule is None or not isinstance(node.value, dict) else rule(node, scope)


def _reference(node: Node, scope: Scope) -> bool | None:
    """ref-1: a reference to a contained resource names one that is there (`#` alone is left to the text)."""
    reference = node.value.get("reference")
    if not isinstance(reference, str) or not reference.startswith("#") or len(reference) == 1:
        return None
    return reference[1:] in scope.contained_ids(node.root_resource)


def _codes(node: Node, _: Scope) -> bool | None:
    """obs-7: with a value, no component has one of the Observation's own codings."""
    components = node.value.get("component")
    if not isinstance(components, list) or not any(str(key).startswith("value") for key in node.value):
        return None
    try:
        own = set(_codings(node.value.get("code")))
        return not any(
            coding in own for component in components for coding in _codings(component.get("code"))
        )
    except (TypeError, AttributeError):
        return None  # of the wrong shape somewhere: the expression sees what can be seen


def _codings(concept: Any) -> Iterator[bytes]:
    for coding in concept.get("coding", ()) if concept is not None else ():
        yield orjson.dumps(coding, option=orjson.OPT_SORT_KEYS)


def _agents(node: Node, scope: Scope) -> bool | None:
    """prov-1: who acted is not whom they acted for; one reference written twice is the same."""
    who, other = node.value.get("who"), node.value.get("onBehalfOf")
    if not isinstance(who, Mapping) or not isinstance(other, Mapping):
        return None
    reference = who.get("reference")
    if not isinstance(reference, str) or reference != other.get("reference"):
        return None
    return False if scope.resolve(node, reference) is not None else None


_RULES: Mapping[str, Callable[[Node, Scope], bool | None]] = {
    "ref-1": _reference,
    "obs-7": _codes,
    "prov-1": _agents,
}
