"""The children of a type as FHIRPath names them, worked out once per edition and type.

`value` stands for every `value[x]` key; `children` lists an element's parts whatever their names.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from functools import lru_cache
from typing import Any

from fhirgallop.conformance.editions.edition import Edition
from fhirgallop.conformance.fhirpath.items import Collection, Item
from fhirgallop.conformance.node import Node


@dataclass(frozen=True, slots=True)
class Field:
    """The JSON keys of one element: (key, type name, whether primitive) each, and whether it is required."""

    keys: tuple[tuple[str, str, bool], ...]
    required: bool


class Model:
    """The fields of every type of an edition, filled as they are asked for."""

    def __init__(self, edition: Edition) -> None:
        self.edition = edition
        self._fields: dict[str, dict[str, Field] | None] = {}

    def fields(self, type_name: str) -> dict[str, Field] | None:
        """Fields by FHIRPath name; None for an unknown type."""
        try:
            return self._fields[type_name]
        except KeyError:
            return self._fields.setdefault(type_name, self._read(type_name))

    def _read(self, type_name: str) -> dict[str, Field] | None:
        definition = self.edition.type(type_name) if type_name else None
        if definition is None:
            return None
        found: dict[str, tuple[list[tuple[str, str, bool]], bool]] = {}
        for json_key, child in definition.keys.items():
            if not child.companion:
                keys, _ = found.setdefault(child.element.stem, ([], child.element.min > 0))
                keys.append((json_key, child.type_name, child.primitive))
        return {name: Field(tuple(keys), required) for name, (keys, required) in found.items()}

    def is_a(self, type_name: str, ancestor: str) -> bool:
        """True when the type is the ancestor or specialises it."""
        return bool(type_name) and (type_name == ancestor or self.edition.is_a(type_name, ancestor))


@lru_cache(maxsize=16)
def model_of(edition: Edition) -> Model:
    """The one model of an edition."""
    return Model(edition)


def member(item: Item, name: str, model: Model, out: Collection) -> bool:
    """Adds the parts of an element that have a name; False when it is required and none is there."""
    value = item.value
    if not isinstance(value, dict):
        _member_of_primitive(item, name, out)
        return True
    fields = model.fields(item.type_name)
    if fields is None:
        _add(item, name, "", value.get(name), value.get("_" + name), out)
        return True
    field = fields.get(name)
    if field is None:
        return True
    before = len(out)
    for json_key, type_name, primitive in field.keys:
        if primitive:
            companion = value.get("_" + json_key)
            if json_key in value or companion is not None:
                _add(item, json_key, type_name, value.get(json_key), companion, out)
        elif json_key in value:
            _add(item, json_key, type_name, value[json_key], None, out)
    return len(out) > before or not field.required


def _member_of_primitive(item: Item, name: str, out: Collection) -> None:
    companion = item.companion
    if name in ("id", "extension") and isinstance(companion, dict):
        _add(item, name, "string" if name == "id" else "Extension", companion.get(name), None, out)
    elif name == "value" and item.value is not None and not isinstance(item.value, list):
        out.append(item)  # the value of a primitive: the same as System value (`mustHaveValue.value`)


def _add(owner: Item, key: str, type_name: str, value: Any, companion: Any, out: Collection) -> None:
    """Adds one value, or each one of an array with its companion."""
    if isinstance(value, list) or isinstance(companion, list):
        values = value if isinstance(value, list) else [value]
        companions = companion if isinstance(companion, list) else [companion]
        for index in range(max(len(values), len(companions))):
            part = values[index] if index < len(values) else None
            beside = companions[index] if index < len(companions) else None
            if part is not None or isinstance(beside, dict):
                out.append(_item(owner, key, type_name, part, beside))
    elif value is not None or isinstance(companion, dict):
        out.append(_item(owner, key, type_name, value, companion))


def _item(owner: Item, key: str, type_name: str, value: Any, companion: Any) -> Item:
    if type_name == "Resource" or (not type_name and isinstance(value, dict) and "resourceType" in value):
        kind = value.get("resourceType") if isinstance(value, dict) else None
        name = kind if isinstance(kind, str) else ""
        return Item(value, None, name, _resource(owner.owner, key, name, value))
    return Item(value, companion if isinstance(companion, dict) else None, type_name, owner.owner)


def _resource(container: Node | None, key: str, type_name: str, value: Any) -> Node:
    """A node for a resource inside another, so that references in it resolve from there."""
    node = Node(value, type_name)
    node.key = key
    node.parent = container
    if key == "contained" and container is not None:
        node.root_resource = container.root_resource
    return node


def children(item: Item, model: Model) -> Iterator[Item]:
    """All parts of an element, in the order of the JSON text."""
    value = item.value
    out: Collection = []
    if not isinstance(value, dict):
        for name in ("id", "extension"):
            _member_of_primitive(item, name, out)
        yield from out
        return
    types = {
        key: name for field in (model.fields(item.type_name) or {}).values() for key, name, _ in field.keys
    }
    for key in value:
        name = key.removeprefix("_")
        if key == "resourceType" or (key != name and name in value):
            continue
        _add(item, name, types.get(name, ""), value.get(name), value.get("_" + name), out)
    yield from out
