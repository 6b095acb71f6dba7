"""Clause: extensions: url, where a known one may stand, and what its value may be.

Source: FHIR "Extensibility", StructureDefinition.context (R4, R4B, R5). ext-1 is an invariant.
"""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping
from typing import Any

from fhirgallop.conformance.bindings import check_binding
from fhirgallop.conformance.editions import Edition
from fhirgallop.conformance.editions.model import ExtensionDef
from fhirgallop.conformance.node import Node
from fhirgallop.conformance.registry import Registry
from fhirgallop.conformance.wording import canonical, one_of
from fhirgallop.outcome import Issue

_ABSOLUTE = re.compile(r"[A-Za-z][A-Za-z0-9+.-]*:\S+", re.ASCII)


def check(node: Node, registry: Registry) -> Iterator[Issue]:
    """Issues of one Extension node."""
    url = node.value.get("url")
    if not isinstance(url, str) or not url or node.parent is None:
        return
    if node.parent.type_name == "Extension" and not _ABSOLUTE.fullmatch(url):
        return
    if not _ABSOLUTE.fullmatch(url):
        said = "The url of an extension must be absolute, except inside another extension. Write it in full."
        yield Issue("error", "value", "extension-url", said, expression=node.expression)
        return
    definition = registry.extension(url)
    if definition is None:
        said = f"The extension {canonical(url)} is not known here, so it was not judged. Load its package."
        yield Issue("warning", "not-found", "extension-unknown", said, expression=node.expression)
        return
    yield from _place(node, definition, registry.edition)
    yield from _content(node, definition, registry)


def _place(node: Node, definition: ExtensionDef, edition: Edition) -> Iterator[Issue]:
    as_modifier = node.key == "modifierExtension"
    if as_modifier != definition.modifier:
        right = "modifierExtension" if definition.modifier else "extension"
        said = f"The extension {canonical(definition.url)} may stand in '{right}' only. Move it there."
        yield Issue("error", "structure", "extension-modifier", said, expression=node.expression)
    if definition.contexts and not any(
        _in_context(node, kind, path, edition) for kind, path in definition.contexts
    ):
        places = one_of(path for _, path in definition.contexts)
        said = f"The extension {canonical(definition.url)} may stand in {places} only. Move or remove it."
        yield Issue("error", "structure", "extension-context", said, expression=node.expression)


def _in_context(node: Node, kind: str, path: str, edition: Edition) -> bool:
    parent = node.parent
    if kind == "extension":
        return parent is not None and parent.type_name == "Extension" and parent.value.get("url") == path
    if kind != "element" or parent is None:
        return True  # a FHIRPath context says where by a rule of its own
    path = path.removeprefix("#")
    if path == "Element" or edition.is_a(parent.type_name, path):
        # "Element" means anywhere: the core's own extensions stand on resources by it
        return True
    return path in _paths(parent, edition)


def _paths(node: Node, edition: Edition) -> set[str]:
    """Every way a definition may name the place of a node: by each type above it and the steps from there."""
    found: set[str] = set()
    if node.element is not None:
        found.update((node.element.path, node.element.path.removesuffix("[x]")))
    steps: list[str] = []
    place: Node | None = node
    while place is not None and place.element is not None:
        steps.insert(0, place.element.name)
        place = place.parent
        if place is None:
            break
        for kind in edition.ancestors(place.type_name):
            named = ".".join((kind, *steps))
            found.update((named, named.replace("[x]", "")))
        if place.resource is place:
            break
    return found


def _content(node: Node, definition: ExtensionDef, registry: Registry) -> Iterator[Issue]:
    value: Mapping[Any, Any] = node.value
    said = {place.code for place in _value_places(node, registry.edition)}
    at = node.expression
    name = canonical(definition.url)
    if said and not definition.types:
        text = f"The extension {name} has no value of its own, only extensions. Move the value there."
        yield Issue("error", "structure", "extension-value-type", text, expression=at)
    elif said - set(definition.types):
        text = f"The value of the extension {name} must be of type {one_of(definition.types)}. Use that type."
        yield Issue("error", "structure", "extension-value-type", text, expression=at)
    elif definition.types and not definition.parts and "extension" in value and not said:
        text = (
            f"The extension {name} needs a value, not nested extensions. Use type {one_of(definition.types)}."
        )
        yield Issue("error", "structure", "extension-value-type", text, expression=at)
    if definition.parts:
        yield from _parts(node, definition)
    if definition.binding and said:
        for key, item in value.items():
            place = registry.edition.child("Extension", key)
            if place is not None and place.element.is_choice and not place.companion:
                child = node.child(item, None, place, key, None)
                if isinstance(item, str if place.primitive else Mapping):
                    yield from check_binding(child, definition.binding, registry)


def _value_places(node: Node, edition: Edition) -> Iterator[Any]:
    for key in node.value:
        place = edition.child("Extension", key)
        if place is not None and place.element.is_choice:
            yield place


def _parts(node: Node, definition: ExtensionDef) -> Iterator[Issue]:
    nested = node.value.get("extension")
    present: set[str] = set()
    name = canonical(definition.url)
    for index, part in enumerate(nested if isinstance(nested, list) else ()):
        url = part.get("url") if isinstance(part, Mapping) else None
        if not isinstance(url, str):
            continue
        present.add(url)
        at = f"{node.expression}.extension[{index}]"
        if url not in definition.parts:
            if not _ABSOLUTE.fullmatch(url):
                text = f"The extension {name} has no such part. Use {one_of(definition.parts)}."
                yield Issue("error", "structure", "extension-part", text, expression=at)
            continue
        types = definition.parts[url]
        keys = [
            k.removeprefix("_").removeprefix("value") for k in part if k.removeprefix("_").startswith("value")
        ]
        if types and any(key.lower() not in {t.lower() for t in types} for key in keys):
            text = f"The value of this part must be of type {one_of(types)}. Use that type."
            yield Issue("error", "structure", "extension-value-type", text, expression=at)
    missing = set(definition.required) - present
    if missing:
        text = f"The extension {name} needs {one_of(missing)} as nested extension. Add it."
        yield Issue("error", "required", "extension-part", text, expression=node.expression)
