"""The walk: every node of a resource, once, through the clauses in their order.

CLAUSES here, each in a module of its own: structure, cardinality, bindings, references, extensions, bundles,
primitives, xhtml, invariants, contained, profiles, vital_signs.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence

from fhirgallop.conformance import (
    bindings,
    bundles,
    cardinality,
    contained,
    extensions,
    invariants,
    primitives,
    profiles,
    references,
    structure,
    vital_signs,
    xhtml,
)
from fhirgallop.conformance.node import Node, Scope
from fhirgallop.conformance.registry import Registry
from fhirgallop.outcome import Issue


def judge(start: Node, known: Registry, scope: Scope, named: Sequence[str] = ()) -> Iterator[Issue]:
    """Issues of a node and all below it; `named` are profiles it must meet beside those it declares."""
    edition = known.edition
    by_profile = profiles.Judge(known, scope)
    stack = [start]
    while stack:
        node = stack.pop()
        issues: list[Issue] = []
        if isinstance(node.value, Mapping):
            children = structure.open_node(node, edition, issues)
            yield from _object_clauses(node, known, scope)
            if node.resource is node:
                yield from _resource_clauses(node, by_profile, named if node is start else ())
        else:
            children = structure.open_primitive(node, edition, issues)
            yield from _primitive_clauses(node, known, scope)
        yield from issues
        stack.extend(reversed(children))


def _object_clauses(node: Node, known: Registry, scope: Scope) -> Iterator[Issue]:
    edition = known.edition
    yield from cardinality.check(node, edition)
    yield from bindings.check(node, known)
    if node.type_name == "Reference":
        yield from references.check(node, edition, scope.resolve)
        yield from bundles.check_reference(node, scope.resolve)
    elif node.type_name == "Extension":
        yield from extensions.check(node, known)
    elif node.type_name == "Bundle.entry":
        yield from bundles.check(node, edition)
    for issue in invariants.check(node, scope):
        # a contained resource is told in its container's narrative (FHIR, "Contained resources")
        if issue.rule != "dom-6" or node.key != "contained":
            yield issue


def _resource_clauses(node: Node, by_profile: profiles.Judge, named: Sequence[str]) -> Iterator[Issue]:
    yield from contained.check(node)
    implied = vital_signs.profiles_for(node.value) if node.type_name == "Observation" else ()
    for url in dict.fromkeys((*named, *profiles.declared(node), *implied)):
        yield from by_profile.check(node, url)


def _primitive_clauses(node: Node, known: Registry, scope: Scope) -> Iterator[Issue]:
    edition = known.edition
    faults = list(primitives.check(node, edition))
    yield from faults
    if faults:
        return
    yield from bindings.check(node, known)
    if node.type_name == "xhtml" and node.value is not None:
        yield from xhtml.check(node.value, node.expression)
    elif node.type_name == "canonical":
        yield from references.check(node, edition, scope.resolve)
    yield from invariants.check(node, scope)
