"""The fast pass: settles a resource that is plainly right, without a walk; the rest goes the thorough way.

A generated schema (see `fast_schema`) is run by jsonschema-rs without call-backs. What it cannot say of a
Bundle (targets in other entries, full URLs twice) is looked at here. Whatever is accepted has exactly the
issues returned, as the thorough pass would say; whatever is refused may still be right.
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from functools import lru_cache
from typing import Any

from jsonschema_rs import Draft4Validator, RegexOptions

from fhirgallop.conformance import structure, walk
from fhirgallop.conformance.fast_invariants import REFUSED
from fhirgallop.conformance.fast_schema import ID, UUID, SchemaBuilder
from fhirgallop.conformance.node import Node
from fhirgallop.conformance.registry import Registry
from fhirgallop.conformance.source import exact
from fhirgallop.outcome import Issue

MAX_ALTERNATIVES = 12
_KINDS = {"transaction": True, "batch": True, "collection": False}
_DOM_6 = "dom-6"
_LONG = re.compile(rb"[0-9.]{17}")


def settle(value: Any, known: Registry, text: bytes | None = None, *, same: bool = False) -> list[Issue] | None:
    """All issues of a resource that is plainly right (only missing narratives, then); None when in doubt.

    Args:
        value: the parsed resource, in which it is proved that no key stood twice.
        known: the definitions.
        text: the text it was read from, if it was.
        same: whether that text is the value written again, byte for byte.
    """
    kind = value.get("resourceType") if type(value) is dict else None
    if type(kind) is not str:
        return None
    if text is not None and not same and known.edition.name == "R5" and _LONG.search(text):
        return None  # R5 limits the digits of a number, which a float has lost
    if kind == "Bundle":
        missing = _bundle(value, known, text)
    else:
        validator = _fitting(known, kind, tuple(value))
        if validator is None or not _valid(validator, value):
            return None
        missing = [] if "text" in value or kind in _no_narrative(known) else [kind]
    if not missing:
        return missing
    # the place of a missing narrative in a text has to be found
    return _without_narrative(value, missing, known) if text is None else None


@lru_cache(maxsize=4096)
def _fitting(known: Registry, kind: str, keys: tuple[str, ...]) -> Draft4Validator | None:
    """The validator of a resource type, if these keys may stand together at its root.

    That is settled once for each set of keys; None too for a type that no schema can settle.
    """
    presence = _presence(known, kind)
    return _resource(known, kind) if presence is not None and _valid(presence, dict.fromkeys(keys)) else None


@lru_cache(maxsize=512)
def _presence(known: Registry, kind: str) -> Draft4Validator | None:
    schema = SchemaBuilder(known).presence(kind) if kind in known.edition.resources else REFUSED
    return None if schema is REFUSED else _compiled(schema)


def _bundle(value: dict[str, Any], known: Registry, text: bytes | None) -> list[str] | None:
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
    missing: list[str] = []
    for index, (entry, resource, kind) in enumerate(zip(entries, resources, kinds, strict=True)):
        if not _consistent(entry, resource, kind):
            return None
        if index in skip:
            continue
        if _fitting(known, kind, tuple(resource)) is None or not _targets_right(resource, _plan(known, kind), urls):
            return None
        if "text" not in resource and kind not in _no_narrative(known):
            missing.append(f"Bundle.entry[{index}].resource")
    return missing if not doubtful or _judged_well(value, text, doubtful, known) else None


def _doubtful(
    value: dict[str, Any], resources: list[Any], kinds: list[str], known: Registry, asks: bool
) -> list[int] | None:
    """Places of the entries whose resources are in doubt, if all else of the Bundle is plainly right."""
    places = [
        index
        for index, (resource, kind) in enumerate(zip(resources, kinds, strict=True))
        if (validator := _fitting(known, kind, tuple(resource))) is None or not _valid(validator, resource)
    ]
    if not places or len(places) > max(4, len(resources) // 4):
        return None
    emptied = [dict(entry) for entry in value["entry"]]
    for entry in emptied:
        entry["resource"] = {"resourceType": entry["resource"]["resourceType"]}
    outline = _outline(known, frozenset(kinds), asks)
    return places if outline is not None and _valid(outline, {**value, "entry": emptied}) else None


def _judged_well(value: dict[str, Any], text: bytes | None, places: list[int], known: Registry) -> bool:
    """Whether the walk finds nothing wrong with the resources of these entries."""
    root = Node(value if text is None else exact(text).value, "Bundle")
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


def _targets_right(held: Mapping[str, Any], plan: Mapping[str, Any], urls: Mapping[str, str]) -> bool:
    """Whether every urn:uuid reference that is a full URL of the Bundle leads to a type allowed."""
    for key, value in held.items():
        step = plan.get(key)
        if step is None:
            continue
        for item in value if type(value) is list else (value,):
            if type(step) is dict:
                if not _targets_right(item, step, urls):
                    return False
            elif (kind := urls.get(item.get("reference"))) is not None and kind not in step:
                return False
    return True


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
def _plan(known: Registry, name: str, inside: frozenset[str] = frozenset()) -> Mapping[str, Any]:
    """Where references stand in a resource: key -> types allowed, or the same of a nested type.

    Data types, and a nested type inside itself, are left out: the schema lets no urn into the first and
    refuses the second.
    """
    edition = known.edition
    definition = edition.type(name)
    plan: dict[str, Any] = {}
    for key, child in definition.keys.items() if definition else ():
        nested = edition.type(child.type_name)
        if child.type_name == "Reference":
            targets = child.type.targets
            if targets:
                plan[key] = frozenset(r for r in edition.resources if any(edition.is_a(r, t) for t in targets))
        elif nested is not None and nested.kind == "nested" and nested.name not in inside:
            deeper = _plan(known, nested.name, inside | {nested.name})
            if deeper:
                plan[key] = deeper
    return plan


@lru_cache(maxsize=8)
def _no_narrative(known: Registry) -> frozenset[str]:
    """Resource types that no invariant asks a narrative of (Bundle, Binary, Parameters)."""
    return frozenset(
        name
        for name in known.edition.resources
        if all(i.key != _DOM_6 for i in getattr(known.edition.type(name), "invariants", ()))
    )
