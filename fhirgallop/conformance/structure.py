"""Clause: the JSON shape of each element: known names, objects, arrays, primitives, companions, nulls.

Opens one object node into its children. Source: FHIR "JSON representation of resources" (R4, R4B, R5).
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any

from fhirgallop.conformance.editions import Edition
from fhirgallop.conformance.editions.model import Child
from fhirgallop.conformance.node import Node
from fhirgallop.conformance.wording import name
from fhirgallop.outcome import Issue

ELE_1 = "All FHIR elements must have a value or children"


def open_node(node: Node, edition: Edition, issues: list[Issue]) -> list[Node]:
    """The children of an object node whose own shape is right; what is wrong goes to `issues`."""
    definition = edition.type(node.type_name)
    if definition is None:
        return []
    value: Mapping[Any, Any] = node.value
    children: list[Node] = []
    keys = definition.keys
    for key, item in value.items():
        place = keys.get(key)
        if place is None:
            if key != "resourceType" or definition.kind != "resource":
                issues.append(_unknown(node, key, edition))
        elif place.companion:
            if key[1:] not in value:
                children.extend(_primitive(node, key[1:], place, None, item, issues))
            elif item is None:
                issues.append(_null(node, key))
        elif place.primitive:
            children.extend(_primitive(node, key, place, item, value.get("_" + key), issues))
        else:
            children.extend(_objects(node, key, place, item, issues))
    if definition.kind != "resource" and not value.keys() - {"id"}:
        issues.append(_issue(node, "invariant", "ele-1", f"{ELE_1}. Fill this element or leave it out."))
    return [child for child in children if _resolved(child, edition, issues)]


def root(value: Any, edition: Edition, issues: list[Issue]) -> Node | None:
    """The root node, or None when the value is no resource of this edition."""
    if not isinstance(value, Mapping):
        said = "A resource must be one JSON object. Send it as { ... } with a resourceType."
        issues.append(Issue("fatal", "structure", "json-object", said))
        return None
    kind = value.get("resourceType")
    if not isinstance(kind, str):
        said = "The resource says no resourceType. Add it as the first member."
        issues.append(Issue("fatal", "structure", "resource-type-missing", said))
        return None
    if kind not in edition.resources:
        said = f"The resourceType is none of {edition.name}. Check its spelling and the edition."
        issues.append(Issue("fatal", "structure", "resource-type-unknown", said))
        return None
    return Node(value, kind)


def open_primitive(node: Node, edition: Edition, issues: list[Issue]) -> list[Node]:
    """The children of a primitive: the id and extensions that its `_x` object holds."""
    companion = node.companion
    if companion is None:
        return []
    children: list[Node] = []
    for key, item in companion.items():
        place = edition.child(node.type_name, key)
        if place is None or place.companion:
            issues.append(_unknown(node, key, edition))
        elif place.primitive:
            children.extend(_primitive(node, key, place, item, None, issues))
        else:
            children.extend(_objects(node, key, place, item, issues))
    if node.value is None and not companion.keys() - {"id"}:
        said = f"{ELE_1}. Give a value, or an extension that says why there is none."
        issues.append(_issue(node, "invariant", "ele-1", said))
    return children


def _primitive(
    node: Node, key: str, place: Child, item: Any, companion: Any, issues: list[Issue]
) -> Iterator[Node]:
    element = place.element
    if not element.many:
        if isinstance(item, (list, Mapping)):
            _wrong_kind(node, key, item, "a single primitive value", issues)
            return
        if item is None and key in _holder(node):
            issues.append(_null(node, key))
            return
        if companion is None or _is_companion(node, key, companion, issues):
            yield node.child(item, companion, place, key, None)
        return
    values = _array(node, key, item, issues) if item is not None or key in _holder(node) else []
    companions = _array(node, key, companion, issues) if companion is not None else []
    if values is None or companions is None:
        return
    for index in range(max(len(values), len(companions))):
        one = values[index] if index < len(values) else None
        beside = companions[index] if index < len(companions) else None
        if isinstance(one, (list, Mapping)):
            _wrong_kind(node, key, one, "a list of primitive values", issues)
        elif one is None and beside is None:
            issues.append(_null(node, key))
        elif beside is None or _is_companion(node, key, beside, issues):
            yield node.child(one, beside, place, key, index)


def _holder(node: Node) -> Mapping[Any, Any]:
    """The JSON object whose keys are meant: the node's, or its companion where it is a primitive."""
    held = node.value if isinstance(node.value, Mapping) else node.companion
    return held if isinstance(held, Mapping) else {}


def _objects(node: Node, key: str, place: Child, item: Any, issues: list[Issue]) -> Iterator[Node]:
    if not place.element.many:
        if item is None:
            issues.append(_null(node, key))
        elif not isinstance(item, Mapping):
            _wrong_kind(node, key, item, "an object", issues)
        else:
            yield node.child(item, None, place, key, None)
        return
    values = [item] if isinstance(item, Mapping) else item
    if isinstance(item, Mapping):
        _wrong_kind(node, key, item, "an array", issues)
    values = _array(node, key, values, issues)
    for index, one in enumerate(values or ()):
        if isinstance(one, Mapping):
            yield node.child(one, None, place, key, None if values is not item else index)
        elif one is None:
            issues.append(_null(node, key))
        else:
            _wrong_kind(node, key, one, "a list of objects", issues)


def _array(node: Node, key: str, item: Any, issues: list[Issue]) -> list[Any] | None:
    if item is None:
        issues.append(_null(node, key))
        return None
    if not isinstance(item, list):
        _wrong_kind(node, key, item, "an array", issues)
        return None
    if not item:
        said = f"{name(key)} is an empty array. Leave the element out when there is nothing to say."
        issues.append(_issue(node, "structure", "json-array-empty", said))
        return None
    return item


def _is_companion(node: Node, key: str, companion: Any, issues: list[Issue]) -> bool:
    if isinstance(companion, Mapping):
        return True
    _wrong_kind(node, "_" + key, companion, "an object with id and extension", issues)
    return False


def _resolved(child: Node, edition: Edition, issues: list[Issue]) -> bool:
    """Gives a node that holds a resource its resource type; False when it has none that is known."""
    if child.element is None or child.type_name not in ("Resource", "DomainResource"):
        return True
    kind = child.value.get("resourceType")
    if isinstance(kind, str) and kind in edition.resources:
        child.as_resource(kind)
        return True
    missing = not isinstance(kind, str)
    rule = "resource-type-missing" if missing else "resource-type-unknown"
    said = "says no resourceType" if missing else f"has a resourceType that is none of {edition.name}"
    issues.append(
        _issue(child, "structure", rule, f"The resource here {said}. Give a resource type of {edition.name}.")
    )
    return False


def _unknown(node: Node, key: Any, edition: Edition) -> Issue:
    said = f"{name(key)} is no element of {node.type_name} in {edition.name}. Remove it, or correct its name."
    return _issue(node, "structure", "unknown-element", said)


def _null(node: Node, key: str) -> Issue:
    said = f"{name(key)} holds null where a value must stand. Leave out what has nothing to say."
    return _issue(node, "structure", "json-null", said)


def _wrong_kind(node: Node, key: str, item: Any, wanted: str, issues: list[Issue]) -> None:
    kinds = {list: "an array", bool: "a boolean", str: "a text", type(None): "null"}
    got = "an object" if isinstance(item, Mapping) else kinds.get(type(item), "a number")
    rule = (
        "array-expected"
        if wanted == "an array"
        else "object-expected"
        if "object" in wanted
        else "primitive-expected"
    )
    said = f"{name(key)} must be {wanted}, but {got} stands there. Write it as {wanted}."
    issues.append(_issue(node, "structure", rule, said))


def _issue(node: Node, code: str, rule: str, said: str) -> Issue:
    return Issue("error", code, rule, said, expression=node.expression)
