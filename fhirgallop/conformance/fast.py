"""The fast pass: settles a resource that is plainly right, without a walk; the rest goes the thorough way.

A generated schema (see `fast_schema`) is run by jsonschema-rs without call-backs. What it cannot say of a
Bundle (targets in other entries, full URLs twice) is looked at here. Whatever is accepted has exactly the
issues returned, as the thorough pass would say; whatever is refused may still be right.
"""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping
from functools import lru_cache
from typing import Any

from jsonschema_rs import Draft4Validator, RegexOptions

from fhirgallop.conformance import structure, walk
from fhirgallop.conformance.fast_invariants import REFUSED
from fhirgallop.conformance.fast_schema import ID, UUID, SchemaBuilder
from fhirgallop.conformance.node import Node
from fhirgallop.conformance.registry import Registry
from fhirgallop.conformance.source import Source, exact
from fhirgallop.outcome import Issue

MAX_ALTERNATIVES = 12
_KINDS = {"transaction": True, "batch": True, "collection": False}
_DOM_6 = "dom-6"
_LONG = re.compile(rb"[0-9.]{17}")


def settle(read: Source, known: Registry) -> list[Issue] | None:
    """All issues of a resource that is plainly right (only missing narratives, then); None when in doubt.

    Args:
        read: what was read, proved to have no key twice.
        known: the definitions.
    """
    value = read.value
    if not isinstance(value, dict):
        return None
    kind = value.get("resourceType")
    if not isinstance(kind, str):
        return None
    if read.text is not None and known.edition.name == "R5" and not _short_numbers(read.text):
        return None
    if kind == "Bundle":
        missing = _bundle(read, value, known)
    else:
        validator = _resource(known, kind)
        missing = [] if validator is not None and _valid(validator, value) else None
        if missing is not None and "text" not in value and kind not in _no_narrative(known):
            missing = [kind]
    if missing is None:
        return None
    if not missing:
        return []
    if read.text is not None:
        return None  # the place in the text has to be found
    return _without_narrative(value, missing, known)


def accepts(value: Mapping[str, Any], known: Registry) -> bool:
    """Whether the schema of its type takes a single resource."""
    validator = _resource(known, str(value.get("resourceType")))
    return validator is not None and _valid(validator, value)


def _bundle(read: Source, value: dict[str, Any], known: Registry) -> list[str] | None:
    """Expressions of the resources without narrative; None when something in the Bundle is in doubt."""
    asks = _KINDS.get(value.get("type", "")) if isinstance(value.get("type"), str) else None
    entries = value.get("entry")
    if asks is None or not isinstance(entries, list):
        return None
    try:
        resources = [entry["resource"] for entry in entries]
        kinds = [resource["resourceType"] for resource in resources]
        urls = {entry["fullUrl"]: kind for entry, kind in zip(entries, kinds, strict=True)}
        names = frozenset(kinds)
    except (TypeError, KeyError):
        return None
    if len(urls) != len(entries) or len(names) > MAX_ALTERNATIVES or not all(isinstance(n, str) for n in names):
        return None
    validator = _envelope(known, names, asks)
    if validator is None:
        return None
    doubtful: list[int] = []
    if not _valid(validator, value):
        found = _doubtful(value, resources, kinds, known, asks)
        if found is None:
            return None
        doubtful = found
    skip = frozenset(doubtful)
    for index, (entry, resource, kind) in enumerate(zip(entries, resources, kinds, strict=True)):
        if not _consistent(entry, resource, kind):
            return None
        if index not in skip and not _targets_right(resource, kind, urls, known):
            return None
    if doubtful and not _judged_well(read, doubtful, known):
        return None
    return [
        f"Bundle.entry[{index}].resource"
        for index, resource in enumerate(resources)
        if "text" not in resource and index not in skip and kinds[index] not in _no_narrative(known)
    ]


def _doubtful(
    value: dict[str, Any], resources: list[Any], kinds: list[str], known: Registry, asks: bool
) -> list[int] | None:
    """Places of the entries whose resources are in doubt, if all else of the Bundle is plainly right."""
    places = [
        index
        for index, (resource, kind) in enumerate(zip(resources, kinds, strict=True))
        if (validator := _resource(known, kind)) is None or not _valid(validator, resource)
    ]
    if not places or len(places) > max(4, len(resources) // 4):
        return None
    emptied = [dict(entry) for entry in value["entry"]]
    for entry in emptied:
        entry["resource"] = {"resourceType": entry["resource"]["resourceType"]}
    outline = _outline(known, frozenset(kinds), asks)
    return places if outline is not None and _valid(outline, {**value, "entry": emptied}) else None


def _judged_well(read: Source, places: list[int], known: Registry) -> bool:
    """Whether the walk finds nothing wrong with the resources of these entries."""
    value = read.value if read.text is None else exact(read.text).value
    root = Node(value, "Bundle")
    scope = walk.scope_of(root, known)
    issues: list[Issue] = []
    entries = [n for n in structure.open_node(root, known.edition, issues) if n.key == "entry"]
    for place in places:
        for node in structure.open_node(entries[place], known.edition, issues):
            if node.key == "resource" and next(walk.judge(node, known, scope), None) is not None:
                return False
    return not issues


def _consistent(entry: Mapping[str, Any], resource: Mapping[str, Any], kind: str) -> bool:
    """Whether fullUrl and request agree with the resource's id, as the bundles clause asks."""
    url = entry["fullUrl"]
    ident = resource.get("id")
    if not url.startswith("urn:uuid:") and (ident is None or not url.endswith(f"/{kind}/{ident}")):
        return False
    request = entry.get("request")
    return request is None or request["method"] != "PUT" or request["url"] == f"{kind}/{ident}"


def _targets_right(
    resource: Mapping[str, Any], kind: str, urls: Mapping[str, str], known: Registry
) -> bool:
    """Whether every urn:uuid reference of a resource that is in the Bundle leads to a type allowed."""
    return all(
        reference not in urls or not allowed or urls[reference] in allowed
        for reference, allowed in _urns(resource, _plan(known, kind))
    )


def _urns(held: Mapping[str, Any], plan: Mapping[str, Any]) -> Iterator[tuple[str, frozenset[str]]]:
    for key, value in held.items():
        step = plan.get(key)
        if step is None:
            continue
        for item in value if isinstance(value, list) else (value,):
            if isinstance(step, Mapping):
                yield from _urns(item, step)
            else:
                reference = item.get("reference")
                if reference is not None and reference.startswith("urn:"):
                    yield reference, step


def _without_narrative(value: dict[str, Any], places: list[str], known: Registry) -> list[Issue] | None:
    """The issues of the missing narratives, each as the walk words it."""
    root = Node(value, str(value["resourceType"]))
    scope = walk.scope_of(root, known)
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
            found = [i for i in walk.invariants.check(node, scope) if i.rule == _DOM_6]
            issues.extend(found)
    return issues


def _valid(validator: Draft4Validator, value: object) -> bool:
    """False also for what JSON cannot hold: the thorough pass says what that is."""
    try:
        return validator.is_valid(value)
    except (ValueError, TypeError, OverflowError, RecursionError):
        return False


def _short_numbers(text: bytes) -> bool:
    """Whether no number has more digits than R5 allows (a long run of digits in a text counts too)."""
    return _LONG.search(text) is None


@lru_cache(maxsize=512)
def _resource(known: Registry, kind: str) -> Draft4Validator | None:
    builder = SchemaBuilder(known)
    if kind not in known.edition.resources:
        return None
    schema = builder.resource(kind)
    if schema is REFUSED:
        return None
    return _compiled({**schema, "definitions": builder.definitions})


@lru_cache(maxsize=128)
def _envelope(known: Registry, kinds: frozenset[str], asks: bool) -> Draft4Validator | None:
    """The validator of a whole Bundle that holds resources of these types."""
    builder = SchemaBuilder(known)
    schemas = {}
    for kind in sorted(kinds):
        schema = builder.resource(kind) if kind in known.edition.resources else REFUSED
        # a type that no schema can settle is only outlined here, and judged entry by entry
        schemas[kind] = REFUSED if schema is REFUSED else schema
    return _bundle_schema(schemas, builder, asks)


@lru_cache(maxsize=128)
def _outline(known: Registry, kinds: frozenset[str], asks: bool) -> Draft4Validator | None:
    """The validator of a Bundle whose resources are looked at apart."""
    if not kinds <= known.edition.resources:
        return None
    schemas = {kind: {"properties": {"resourceType": {"enum": [kind]}}} for kind in sorted(kinds)}
    return _bundle_schema(schemas, SchemaBuilder(known), asks)


def _bundle_schema(schemas: Mapping[str, Any], builder: SchemaBuilder, asks: bool) -> Draft4Validator | None:
    bundle = builder.bundle_head()
    entry = {"anyOf": [_entry(kind, schema, asks) for kind, schema in schemas.items()]}
    bundle["properties"]["entry"] = {"type": "array", "minItems": 1, "items": entry}
    return _compiled({**bundle, "definitions": builder.definitions})


def _entry(kind: str, resource: Mapping[str, Any], asks: bool) -> dict[str, Any]:
    properties: dict[str, Any] = {
        "resource": resource,
        "fullUrl": {"type": "string", "pattern": rf'^({UUID}|https?://[!"$->@-~]+/{kind}/{ID})$'},
    }
    if asks:
        properties["request"] = {
            "anyOf": [
                {
                    "type": "object",
                    "properties": {
                        "method": {"enum": ["POST"]},
                        "url": {"enum": [kind]},
                        "ifNoneExist": {"type": "string", "pattern": "^[!-~]+$"},
                    },
                    "required": ["method", "url"],
                    "additionalProperties": False,
                },
                {
                    "type": "object",
                    "properties": {"method": {"enum": ["PUT"]}, "url": {"type": "string", "pattern": f"^{kind}/{ID}$"}},
                    "required": ["method", "url"],
                    "additionalProperties": False,
                },
            ]
        }
    return {
        "type": "object",
        "properties": properties,
        "required": sorted(properties),
        "additionalProperties": False,
    }


def _compiled(schema: Mapping[str, Any]) -> Draft4Validator:
    return Draft4Validator(schema, pattern_options=RegexOptions())


@lru_cache(maxsize=512)
def _plan(known: Registry, kind: str, depth: int = 0) -> Mapping[str, Any]:
    """Where references stand in a type: key -> types allowed (empty: any), or the same of a nested type."""
    edition = known.edition
    definition = edition.type(kind)
    plan: dict[str, Any] = {}
    for key, child in definition.keys.items() if definition else ():
        if child.companion or child.primitive or key in ("extension", "modifierExtension", "contained"):
            continue
        if child.type_name == "Reference":
            targets = child.type.targets
            plan[key] = (
                frozenset(r for r in edition.resources if any(edition.is_a(r, t) for t in targets))
                if targets
                else frozenset()
            )
        elif depth < 4:
            nested = _plan(known, child.type_name, depth + 1)
            if nested:
                plan[key] = nested
    return plan


@lru_cache(maxsize=8)
def _no_narrative(known: Registry) -> frozenset[str]:
    """Resource types that no invariant asks a narrative of (Bundle, Binary, Parameters)."""
    return frozenset(
        name
        for name in known.edition.resources
        if all(i.key != _DOM_6 for i in getattr(known.edition.type(name), "invariants", ()))
    )
