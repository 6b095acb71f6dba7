"""Writes the JSON Schema of the fast pass: what it accepts has no issue; what is rare or doubtful it refuses.

No companions, extensions, contained resources or element ids; formats a little narrower than FHIR's.
Generated from the definitions of an edition, and narrowed by profiles in `fast_profiles`.
JSON Schema 2020-12. It takes 1.0 for an integer and FHIR does not, so whole numbers stand only at a
resource's root, where they are looked at apart (`fast_residue`), as are ranges and periods.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from copy import deepcopy
from dataclasses import dataclass, field
from functools import lru_cache
from typing import Any

from fhirgallop.conformance.editions import Edition
from fhirgallop.conformance.editions.model import Binding, Child, Element, TypeDef
from fhirgallop.conformance.fast_formats import ID, UUID, text
from fhirgallop.conformance.fast_invariants import REFUSED, fragment
from fhirgallop.conformance.fast_residue import CHECKS, Check
from fhirgallop.conformance.primitives import RANGES
from fhirgallop.conformance.registry import Registry

Schema = dict[str, Any]

_LEFT_OUT = frozenset({"extension", "modifierExtension", "contained"})
_MAX_CODES = 2000
_LIMIT = 10**15
_PRESENCE = ("required", "dependentRequired", "dependentSchemas", "allOf")


@dataclass(slots=True)
class Form:
    """How a resource of one type, with certain profiles, may look to be accepted.

    Attributes:
        schema: its schema, but for what must and must not stand together at its root.
        presence: a schema of the keys at the root.
        checks: keys at the root whose values are looked at apart, with the check.
        targets: key -> resource types that a reference there may lead to, or the same of a nested type.
    """

    schema: Schema
    presence: Schema
    checks: dict[str, Check]
    targets: dict[str, Any] = field(default_factory=dict)


class SchemaBuilder:
    """Builds schemas of resource types of one edition; data types stand once, under "$defs"."""

    def __init__(self, registry: Registry, *, urn: bool = True) -> None:
        """`urn`: whether references may lead to entries of a Bundle, which have to be looked up then."""
        self.registry = registry
        self.edition = registry.edition
        self.urn = urn
        self.definitions: dict[str, Schema] = {}
        # Reference and Identifier hold one another: built in this order, only the assigner is refused
        self.type("Reference")

    def resource(self, name: str) -> Schema:
        """The whole schema of a resource type; `REFUSED` when it has rules that no schema can hold."""
        definition = self.edition.type(name)
        if definition is None or definition.kind != "resource":
            return REFUSED
        schema = self._object(definition, root=True)
        if schema is not REFUSED:
            schema["properties"]["resourceType"] = {"enum": [name]}
            ask(schema, ("resourceType",))
        return schema

    def form(self, name: str, schema: Schema) -> Form:
        """A finished schema, parted into what is settled by keys and what is not."""
        definition = self.edition.type(name)
        keys = definition.keys if definition else {}
        return Form(
            schema={k: v for k, v in schema.items() if k not in _PRESENCE},
            presence={k: schema[k] for k in ("type", "additionalProperties", *_PRESENCE) if k in schema}
            | {"properties": dict.fromkeys(schema["properties"], True)},
            checks={
                k: CHECKS[keys[k].type_name][0] for k in schema["properties"] if k in keys and _apart(keys[k])
            },
            targets=self.targets(name),
        )

    def bundle_head(self) -> Schema:
        """The schema of a Bundle (transaction, batch or collection) but for its entries."""
        return {
            "type": "object",
            "properties": {
                "resourceType": {"enum": ["Bundle"]},
                "id": text("id"),
                "meta": self.type("Meta"),
                "type": {"enum": ["transaction", "batch", "collection"]},
                "timestamp": text("instant"),
            },
            "required": ["resourceType", "type", "entry"],
            "additionalProperties": False,
        }

    def targets(self, name: str, inside: frozenset[str] = frozenset()) -> dict[str, Any]:
        """Where references stand in a resource: key -> types allowed, or the same of a nested type.

        Data types, and a nested type inside itself, are left out: the schema lets no urn into the first
        and refuses the second.
        """
        definition = self.edition.type(name)
        plan: dict[str, Any] = {}
        for key, child in definition.keys.items() if definition else ():
            nested = self.edition.type(child.type_name)
            if child.type_name == "Reference":
                allowed = frozenset(self.kinds(child.type.targets))
                if allowed < self.edition.resources:  # else it may lead anywhere
                    plan[key] = allowed
            elif nested is not None and nested.kind == "nested" and nested.name not in inside:
                deeper = self.targets(nested.name, inside | {nested.name})
                if deeper:
                    plan[key] = deeper
        return plan

    def kinds(self, targets: Iterable[str]) -> list[str]:
        """The resource types that references to these targets may lead to."""
        return list(_kinds(self.edition, tuple(targets)))

    def reference(self, targets: tuple[str, ...], *, urn: bool) -> Schema:
        """A Reference to one of these types, as far as the text of the reference says it."""
        if any("/" in t for t in targets):
            return REFUSED
        schema = self.copy("Reference")
        if schema is not REFUSED:
            schema["properties"]["type"] = {"enum": self.kinds(targets)}
            schema.setdefault("dependentSchemas", {})["type"] = {"properties": {"reference": False}}
            literal = rf'(https?://[!"$->@-~]+/)?({"|".join(self.kinds(targets))})/{ID}'
            pattern = f"^({literal}|{UUID})$" if urn else f"^{literal}$"
            schema["properties"]["reference"] = {"type": "string", "pattern": pattern}
        return schema

    def type(self, name: str) -> Schema:
        """A reference to the schema of a data type or nested type, which is built at first use."""
        if name not in self.definitions:
            self.definitions[name] = REFUSED  # while it is built: a type inside itself is refused
            definition = self.edition.type(name)
            self.definitions[name] = REFUSED if definition is None else self._object(definition, root=False)
        return REFUSED if self.definitions[name] is REFUSED else {"$ref": f"#/$defs/{name}"}

    def copy(self, name: str) -> Schema:
        """A type's own schema, open to be narrowed for one place."""
        if self.type(name) is REFUSED:
            return REFUSED
        return deepcopy(self.definitions[name])

    def coded(self, binding: Binding) -> Schema:
        """A Coding with a code of the value set; `REFUSED` where the set is not written out."""
        systems = self._codes(binding)
        if systems is None:
            return REFUSED
        options: list[Schema] = [
            {
                "properties": {"system": {"enum": [system]}, "code": {"enum": sorted(codes)}},
                "required": ["system", "code"],
            }
            for system, codes in sorted(systems.items())
            if codes
        ]
        return options[0] if len(options) == 1 else {"anyOf": options}

    def codes(self, binding: Binding) -> Schema:
        """A code of the value set, whatever its system."""
        systems = self._codes(binding)
        if systems is None:
            return REFUSED
        return {"enum": sorted({code for codes in systems.values() for code in codes})}

    def _codes(self, binding: Binding) -> Mapping[str, Iterable[str]] | None:
        found = self.registry.value_set(binding.value_set)
        if found is None or not found.systems or sum(map(len, found.systems.values())) > _MAX_CODES:
            return None
        return found.systems

    def _object(self, definition: TypeDef, *, root: bool, answered: frozenset[str] = frozenset()) -> Schema:
        additions = [fragment(i.key, i.expression) for i in definition.invariants if i.key not in answered]
        properties = self._properties(definition, root=root)
        schema: Schema = {"type": "object", "properties": properties, "additionalProperties": False}
        if not root:
            schema["minProperties"] = 1
        if any(addition is None for addition in additions):
            return REFUSED
        for element in definition.elements.values():
            if element.min and not require(schema, definition, element.name):
                return REFUSED
        _exclude_choices(schema, definition)
        for addition in additions:
            add_fragment(schema, definition, addition or {})
        return schema

    def _properties(self, definition: TypeDef, *, root: bool) -> dict[str, Schema]:
        left_out = _LEFT_OUT | ({"profile"} if definition.name == "Meta" else set())
        properties: dict[str, Schema] = {}
        for key, child in definition.keys.items():
            if child.companion or key in left_out or (key == "id" and not root):
                continue
            if self._is_integer(child) and not (root and _apart(child)):
                continue
            if root and _apart(child) and not child.primitive:
                properties[key] = self._looked_at_apart(child.type_name)
                continue
            # a urn may lead to another entry, which is looked up for resources and their nested types only
            schema = self._element(child, urn=self.urn and definition.kind in ("resource", "nested"))
            if schema is not REFUSED:
                properties[key] = schema
        return properties

    def _looked_at_apart(self, name: str) -> Schema:
        """A type without the invariants that its check answers for."""
        key = f"{name} apart"
        definition = self.edition.type(name)
        if key not in self.definitions and definition is not None:
            self.definitions[key] = self._object(definition, root=False, answered=CHECKS[name][1])
        return {"$ref": f"#/$defs/{name}%20apart"}

    def _is_integer(self, child: Child) -> bool:
        definition = self.edition.type(child.type_name)
        return definition is not None and definition.json == "integer"

    def _element(self, child: Child, *, urn: bool) -> Schema:
        element = child.element
        if any(fragment(i.key, i.expression) is None for i in element.invariants):
            return REFUSED
        if element.max == 0 or (element.binding is not None and element.binding.maximum):
            return REFUSED
        schema = self._value(child, element, urn=urn)
        if schema is REFUSED or not element.many:
            return schema
        array: Schema = {"type": "array", "minItems": max(1, element.min), "items": schema}
        if element.max is not None:
            array["maxItems"] = element.max
        return array

    def _value(self, child: Child, element: Element, *, urn: bool) -> Schema:
        name, binding = child.type_name, element.binding
        if child.primitive:
            bound = binding is not None and binding.strength in ("required", "extensible")
            return self.codes(binding) if bound and binding is not None else self._primitive(name)
        if name == "Reference":
            return self.reference(child.type.targets, urn=urn)
        if name == "CodeableReference" or self.edition.is_a(name, "Resource"):
            return REFUSED
        if binding is None or binding.strength not in ("required", "extensible"):
            return self.type(name)
        return self.bound(name, binding)

    def bound(self, name: str, binding: Binding) -> Schema:
        """A Coding, CodeableConcept or Quantity with a code of the value set."""
        some = self.coded(binding)
        schema = (
            self.copy(name)
            if name in ("Coding", "CodeableConcept", "Quantity", "SimpleQuantity")
            else REFUSED
        )
        if some is REFUSED or schema is REFUSED:
            return REFUSED
        if name != "CodeableConcept":
            return {**schema, "allOf": [*schema.get("allOf", ()), some]}
        schema["properties"]["coding"] = {**schema["properties"]["coding"], "contains": some}
        if binding.strength == "required":
            schema["required"] = ["coding"]
        return schema

    def _primitive(self, name: str) -> Schema:
        definition = self.edition.type(name)
        if definition is None or name == "integer64":
            return REFUSED
        if definition.json == "boolean":
            return {"type": "boolean"}
        if definition.json == "integer":
            low, high = RANGES[name]
            return {"type": "integer", "minimum": low, "maximum": high}
        if definition.json == "decimal":
            return {"type": "number", "minimum": -_LIMIT, "maximum": _LIMIT}
        return text(name)


@lru_cache(maxsize=4096)
def _kinds(edition: Edition, targets: tuple[str, ...]) -> tuple[str, ...]:
    return tuple(
        sorted(r for r in edition.resources if not targets or any(edition.is_a(r, t) for t in targets))
    )


def _apart(child: Child) -> bool:
    return child.type_name in CHECKS and not child.element.many


def keys_of(definition: TypeDef, name: str, schema: Schema) -> list[str]:
    """The JSON keys of an element that the schema lets in."""
    return [
        key
        for key, child in definition.keys.items()
        if child.element.name == name and not child.companion and key in schema["properties"]
    ]


def ask(schema: Schema, keys: Iterable[str]) -> None:
    """Adds keys to those required."""
    wanted = sorted({*schema.get("required", ()), *keys})
    if wanted:
        schema["required"] = wanted


def require(schema: Schema, definition: TypeDef, name: str) -> bool:
    """Asks for an element; False when the schema lets none of its keys in."""
    keys = keys_of(definition, name, schema)
    if not keys:
        return False
    if len(keys) == 1:
        ask(schema, keys)
    else:
        schema.setdefault("allOf", []).append({"anyOf": [{"required": [key]} for key in keys]})
    return True


def add_fragment(schema: Schema, definition: TypeDef, addition: Mapping[str, Any]) -> None:
    """Merges one invariant's fragment into the schema of its type."""
    for key in addition.get("absent", ()):
        schema["properties"].pop(key, None)
    ask(schema, addition.get("required", ()))
    some = [key for name in addition.get("any", ()) for key in keys_of(definition, name, schema)]
    if "any" in addition:
        schema.setdefault("allOf", []).append({"anyOf": [{"required": [key]} for key in some]})
    for key, others in addition.get("needs", {}).items():
        schema.setdefault("dependentRequired", {})[key] = sorted(others)
    for name, other in addition.get("excludes", ()):
        for key in keys_of(definition, name, schema):
            _exclude(schema, key, other)

    for key, more in addition.get("also", {}).items():
        if key in schema["properties"]:
            held = schema["properties"][key]
            schema["properties"][key] = {**held, "allOf": [*held.get("allOf", ()), more]}


def _exclude_choices(schema: Schema, definition: TypeDef) -> None:
    """Each key of a choice rules out the other keys of it."""
    for name, element in definition.elements.items():
        keys = keys_of(definition, name, schema) if element.is_choice else []
        for key in keys:
            for other in keys:
                if other != key:
                    _exclude(schema, key, other)


def _exclude(schema: Schema, key: str, other: str) -> None:
    rule = schema.setdefault("dependentSchemas", {}).setdefault(key, {"properties": {}})
    rule["properties"][other] = False
