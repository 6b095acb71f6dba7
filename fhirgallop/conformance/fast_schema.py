"""Writes the JSON Schema of the fast pass: what it accepts has no issue; what is rare or doubtful it refuses.

No companions, extensions, contained resources or element ids; formats a little narrower than FHIR's.
Draft 4, because its "integer" refuses 1.0 as FHIR does. Generated from the definitions of an edition.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from typing import Any

from fhirgallop.conformance.editions.model import Binding, Child, Element, TypeDef
from fhirgallop.conformance.fast_invariants import REFUSED, fragment
from fhirgallop.conformance.primitives import RANGES
from fhirgallop.conformance.registry import Registry
from fhirgallop.conformance.vital_signs import PROFILES as VITAL_SIGNS

Schema = Mapping[str, Any]

UUID = "urn:uuid:[0-9a-f]{8}-[0-9a-f]{4}-[0-9a-f]{4}-[0-9a-f]{4}-[0-9a-f]{12}"
ID = r"[A-Za-z0-9\-.]{1,64}"
_DAY = "((0[1-9]|1[0-2])-(0[1-9]|1[0-9]|2[0-8])|(0[13-9]|1[0-2])-(29|30)|(0[13578]|1[02])-31)"
_TIME = r"([01][0-9]|2[0-3]):[0-5][0-9]:[0-5][0-9](\.[0-9]{1,9})?"
_ZONE = r"(Z|[+-](0[0-9]|1[0-3]):[0-5][0-9])"
_TEXT = r"[^\x00-\x08\x0B\x0C\x0E-\x1F]"
_SAID = r"[^<>&\x00-\x08\x0B\x0C\x0E-\x1F\x7F-\x9F\uFFFE\uFFFF]"
_INLINE = f"({_SAID}|<b>{_SAID}*</b>|<i>{_SAID}*</i>|<br/>)"
_BLOCK = f"(<p>{_INLINE}*</p>|<ul>(<li>{_INLINE}*</li>)+</ul>)"
_DIV = (
    r'^<div xmlns="http://www\.w3\.org/1999/xhtml">'
    f"([A-Za-z0-9(]{_INLINE}*|<p>[A-Za-z0-9(]{_INLINE}*</p>{_BLOCK}*|<ul><li>[A-Za-z0-9(]{_INLINE}*</li>"
    f"(<li>{_INLINE}*</li>)*</ul>{_BLOCK}*)</div>$"
)
_PATTERNS = {
    "id": f"^{ID}$",
    "code": "^[!-~]+$",
    "uri": "^[!-~]+$",
    "url": "^[!-~]+$",
    "canonical": '^[!"$-~][!-~]*$',
    "oid": r"^urn:oid:[0-2](\.(0|[1-9][0-9]*))+$",
    "uuid": f"^{UUID}$",
    "date": f"^[1-9][0-9]{{3}}(-(0[1-9]|1[0-2]|{_DAY}))?$",
    "dateTime": f"^[1-9][0-9]{{3}}(-(0[1-9]|1[0-2]|{_DAY}(T{_TIME}{_ZONE})?))?$",
    "instant": f"^[1-9][0-9]{{3}}-{_DAY}T{_TIME}{_ZONE}$",
    "time": f"^{_TIME}$",
    "base64Binary": "^([A-Za-z0-9+/]{4})+([A-Za-z0-9+/]{2}==|[A-Za-z0-9+/]{3}=)?$",
    "xhtml": _DIV,
}
_LEFT_OUT = frozenset({"extension", "modifierExtension", "contained"})
_MAX_CODES = 2000
_PRESENCE = frozenset({"required", "dependencies", "allOf"})
_LIMIT = 10**15


class SchemaBuilder:
    """Builds schemas of resource types of one edition; data types stand once, under "definitions"."""

    def __init__(self, registry: Registry) -> None:
        self._registry = registry
        self._edition = registry.edition
        self.definitions: dict[str, Schema] = {}

    def resource(self, name: str) -> Schema:
        """The schema of a resource type but for `presence`; `REFUSED` when no schema can hold its rules."""
        schema = self._root(name)
        return REFUSED if schema is REFUSED else {k: v for k, v in schema.items() if k not in _PRESENCE}

    def presence(self, name: str) -> Schema:
        """What must and must not stand together at the root of a resource type: it looks at keys only."""
        schema = self._root(name)
        if schema is REFUSED:
            return schema
        held: dict[str, Any] = {k: v for k, v in schema.items() if k in _PRESENCE}
        return {"type": "object", "properties": dict.fromkeys(schema["properties"], {}), **held}

    def _root(self, name: str) -> Schema:
        definition = self._edition.type(name)
        if definition is None:
            return REFUSED
        schema = self._object(definition, root=True)
        if schema is REFUSED:
            return schema
        properties = {"resourceType": {"enum": [name]}, **schema["properties"]}
        if name == "Observation":
            properties["code"] = self._without_vital_signs()
        return {**schema, "properties": properties, "required": ["resourceType", *schema.get("required", ())]}

    def bundle_head(self) -> dict[str, Any]:
        """The schema of a Bundle (transaction, batch or collection) but for its entries."""
        return {
            "type": "object",
            "properties": {
                "resourceType": {"enum": ["Bundle"]},
                "id": {"type": "string", "pattern": _PATTERNS["id"]},
                "meta": self._type("Meta"),
                "type": {"enum": ["transaction", "batch", "collection"]},
                "timestamp": {"type": "string", "pattern": _PATTERNS["instant"]},
            },
            "required": ["resourceType", "type", "entry"],
            "additionalProperties": False,
        }

    def _type(self, name: str) -> Schema:
        if name not in self.definitions:
            self.definitions[name] = REFUSED  # while it is built: a type inside itself is refused
            definition = self._edition.type(name)
            self.definitions[name] = REFUSED if definition is None else self._object(definition, root=False)
        found = self.definitions[name]
        return REFUSED if found is REFUSED else {"$ref": f"#/definitions/{name}"}

    def _object(self, definition: TypeDef, *, root: bool) -> Schema:
        additions = [fragment(i.key, i.expression) for i in definition.invariants]
        if any(a is None for a in additions):
            return REFUSED
        left_out = _LEFT_OUT if definition.name != "Meta" else _LEFT_OUT | {"profile"}
        properties: dict[str, Schema] = {}
        for key, child in definition.keys.items():
            if child.companion or key in left_out or (key == "id" and not root):
                continue
            schema = self._element(child, urn=definition.kind in ("resource", "nested"))
            if schema is not REFUSED:
                properties[key] = schema
        needs: list[Schema] = []
        required: list[str] = []
        for element in definition.elements.values():
            if element.min:
                keys = [k for k, c in definition.keys.items() if c.element is element and k in properties]
                if not keys:
                    return REFUSED
                if element.is_choice:
                    needs.append({"anyOf": [{"required": [k]} for k in keys]})
                else:
                    required.append(keys[0])
        dependencies = _choices(definition, properties)
        for addition in additions:
            _add(addition or {}, definition, properties, required, needs, dependencies)
        schema: dict[str, Any] = {"type": "object", "properties": properties, "additionalProperties": False}
        if not root:
            schema["minProperties"] = 1
        if required:
            schema["required"] = sorted(set(required))
        if dependencies:
            schema["dependencies"] = dependencies
        if needs:
            schema["allOf"] = needs
        return schema

    def _element(self, child: Child, *, urn: bool) -> Schema:
        # a urn may lead to another entry, which is looked up for resources and their nested types only
        element = child.element
        if any(fragment(i.key, i.expression) is None for i in element.invariants):
            return REFUSED
        if element.max == 0 or (element.binding is not None and element.binding.maximum):
            return REFUSED
        schema = self._value(child, element, urn=urn)
        if schema is REFUSED or not element.many:
            return schema
        array: dict[str, Any] = {"type": "array", "minItems": max(1, element.min), "items": schema}
        if element.max is not None:
            array["maxItems"] = element.max
        return array

    def _value(self, child: Child, element: Element, *, urn: bool) -> Schema:
        name = child.type_name
        if child.primitive:
            schema = self._primitive(name, element)
            return schema if element.binding is None else self._bound_code(schema, element.binding)
        if name == "Reference":
            return self._reference(child.type.targets, urn=urn)
        if self._edition.is_a(name, "Resource"):
            return REFUSED
        if name == "CodeableReference":
            return REFUSED
        schema = self._type(name)
        if schema is REFUSED or element.binding is None:
            return schema
        return self._bound(name, element.binding)

    def _primitive(self, name: str, element: Element) -> Schema:
        definition = self._edition.type(name)
        if definition is None or name == "integer64":
            return REFUSED
        if definition.json == "boolean":
            return {"type": "boolean"}
        if definition.json == "integer":
            low, high = RANGES[name]
            return {"type": "integer", "minimum": low, "maximum": high}
        if definition.json == "decimal":
            return {"type": "number", "minimum": -_LIMIT, "maximum": _LIMIT}
        pattern = _PATTERNS.get(name)
        if pattern is not None:
            return {"type": "string", "pattern": pattern}
        return {"type": "string", "pattern": f"^{_TEXT}+$", "maxLength": 1024 * 1024}

    def _codes(self, binding: Binding) -> Mapping[str, Iterable[str]] | None:
        found = self._registry.value_set(binding.value_set)
        if found is None or not found.systems or sum(map(len, found.systems.values())) > _MAX_CODES:
            return None
        return found.systems

    def _bound_code(self, schema: Schema, binding: Binding) -> Schema:
        if binding.strength not in ("required", "extensible"):
            return schema
        systems = self._codes(binding)
        if systems is None:
            return REFUSED
        return {"enum": sorted({code for codes in systems.values() for code in codes})}

    def _bound(self, name: str, binding: Binding) -> Schema:
        """A Coding or CodeableConcept that holds a code of the value set (no allOf: each key is looked at once)."""
        systems = self._codes(binding)
        if systems is None or name not in ("Coding", "CodeableConcept"):
            return REFUSED
        coded: list[Schema] = [
            {
                "properties": {"system": {"enum": [system]}, "code": {"enum": sorted(codes)}},
                "required": ["system", "code"],
            }
            for system, codes in sorted(systems.items())
            if codes
        ]
        some: Schema = coded[0] if len(coded) == 1 else {"anyOf": coded}
        if name == "Coding":
            return {"allOf": [self._type(name), some]}
        concept = self._copy(name)
        if concept is REFUSED:
            return REFUSED
        concept["properties"]["coding"] = {**concept["properties"]["coding"], "not": {"items": {"not": some}}}
        if binding.strength == "required":
            concept["required"] = ["coding"]
        return concept

    def _copy(self, name: str) -> Any:
        """A type's own schema, open to be narrowed for one place."""
        if self._type(name) is REFUSED:
            return REFUSED
        schema = self.definitions[name]
        return {**schema, "properties": dict(schema["properties"])}

    def _reference(self, targets: tuple[str, ...], *, urn: bool) -> Schema:
        if any("/" in t for t in targets):
            return REFUSED
        schema = self._copy("Reference")
        if schema is not REFUSED:
            schema["properties"].pop("type", None)
            schema["properties"]["reference"] = {
                "type": "string",
                "pattern": f"^({self._literal(targets)}|{UUID})$" if urn else f"^{self._literal(targets)}$",
            }
        return schema

    def _literal(self, targets: tuple[str, ...]) -> str:
        edition = self._edition
        kinds = sorted(r for r in edition.resources if not targets or any(edition.is_a(r, t) for t in targets))
        return rf'(https?://[!"$->@-~]+/)?({"|".join(kinds)})/{ID}'

    def _without_vital_signs(self) -> Schema:
        """Observation.code: a vital sign has a profile to meet, and goes the thorough way."""
        concept, coding = self._copy("CodeableConcept"), self._copy("Coding")
        if concept is REFUSED or coding is REFUSED:
            return REFUSED
        coding["properties"]["code"] = {**coding["properties"]["code"], "not": {"enum": sorted(VITAL_SIGNS)}}
        concept["properties"]["coding"] = {**concept["properties"]["coding"], "items": coding}
        return concept  # type: ignore[no-any-return]


def _choices(definition: TypeDef, properties: Mapping[str, Schema]) -> dict[str, Any]:
    """Each key of a choice rules out the other keys of it."""
    groups: dict[str, list[str]] = {}
    for key, child in definition.keys.items():
        if child.element.is_choice and key in properties:
            groups.setdefault(child.element.name, []).append(key)
    return {
        key: {"properties": {other: REFUSED for other in keys if other != key}}
        for keys in groups.values()
        for key in keys
        if len(keys) > 1
    }


def _add(  # noqa: PLR0913 - the parts of one schema under construction
    addition: Mapping[str, Any],
    definition: TypeDef,
    properties: dict[str, Schema],
    required: list[str],
    needs: list[Schema],
    dependencies: dict[str, Any],
) -> None:
    """Merges one invariant's fragment into the schema of its type."""
    for key, value in addition.get("properties", {}).items():
        if value is REFUSED:
            properties.pop(key, None)
    required.extend(addition.get("required", ()))
    if "anyOf" in addition:
        needs.append({"anyOf": addition["anyOf"]})
    for key, others in addition.get("dependencies", {}).items():
        if key in properties:
            dependencies[key] = [*dependencies.get(key, ()), *others]
    if "choice_excludes" in addition:
        choice, other = addition["choice_excludes"]
        for key, child in definition.keys.items():
            if child.element.name == choice and key in properties:
                rule = dependencies.setdefault(key, {"properties": {}})
                rule["properties"][other] = REFUSED
