"""The compiled forms of the fast pass: by which validator a resource, a Bundle or an entry is judged.

A single resource has the form that fits its keys, with checks beside it. Entries of a Bundle that are alike
and plain are judged together, by one schema that says all of them.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from functools import cached_property, lru_cache
from typing import Any

from jsonschema_rs import Draft202012Validator, RegexOptions

from fhirgallop.conformance import fast_profiles
from fhirgallop.conformance.fast_formats import ID, UUID
from fhirgallop.conformance.fast_logic import Logic
from fhirgallop.conformance.fast_plain import plain
from fhirgallop.conformance.fast_residue import Check
from fhirgallop.conformance.fast_schema import Form, Schema, SchemaBuilder
from fhirgallop.conformance.registry import Registry

Valid = Callable[[object], bool]
# a resource type, the profiles declared, and those that vital-signs codes ask for
What = tuple[str, tuple[str, ...], tuple[str, ...]]

_UUID_URL = {"type": "string", "pattern": "^[0-9a-z:-]+$", "allOf": [{"pattern": "^urn:uuid:"}]}
_ANY_URL = {"type": "string", "pattern": rf'^({UUID}|https?://[!"$->@-~]+/[A-Z][A-Za-z]+/{ID})$'}


@dataclass(frozen=True, slots=True)
class Ready:
    """A compiled form for resources with certain keys.

    Attributes:
        is_valid: the validator.
        checks: keys whose values are looked at apart, with the check.
        components: whether codes of components are to be compared with the resource's own.
        targets: where references to other entries may stand, and the types they may lead to.
    """

    is_valid: Valid
    checks: tuple[tuple[str, Check], ...]
    components: bool
    targets: Mapping[str, Any]


class Entries:
    """How entries under UUIDs are judged, each with a plain resource of one kind; compiled at first use.

    Attributes:
        expected: whether the profiles ask for a reference to findings, which are mostly sent beside it.
        targets: where references to other entries may stand, and the types they may lead to; none where
            the schema takes no such references, so that nothing is left to be looked at.
        checks: keys whose values are looked at apart, with the check.
    """

    def __init__(self, known: Registry, what: What, *, asks: bool, linked: bool = False) -> None:
        self._made_of = known, what, asks
        self._builder = SchemaBuilder(known, urn=linked)
        found = fast_profiles.form(self._builder, *what)
        resource = None if found is None else plain(found, what[0], known.edition)
        self._entry = None
        self.expected = False
        self.targets: Mapping[str, Any] = {}
        self.checks: tuple[tuple[str, Check], ...] = ()
        if found is not None and resource is not None:
            self._entry = _entry(_UUID_URL, resource, _request(what[0]) if asks else None)
            self.expected = any("Observation" in found.targets.get(k, ()) for k in resource["required"])
            self.targets = found.targets if linked else {}
            self.checks = tuple(item for item in found.checks.items() if item[0] in resource["properties"])

    @cached_property
    def is_valid(self) -> Valid:
        """The validator of a list of entries."""
        if self._entry is None:
            return _never
        return _closed({"type": "array", "items": self._entry}, self._builder).is_valid

    @cached_property
    def linked(self) -> Entries:
        """The same where the resources may refer to other entries."""
        known, what, asks = self._made_of
        return Entries(known, what, asks=asks, linked=True)


def _never(_value: object) -> bool:
    return False


@lru_cache(maxsize=512)
def plain_entries(known: Registry, what: What, asks: bool) -> Entries:
    """How entries with plain resources of one kind are judged, if they refer to no others.

    `asks`: each carries a request, which creates the resource or searches for the one to update.
    """
    return Entries(known, what, asks=asks)


@lru_cache(maxsize=2)
def any_entry(asks: bool) -> Valid:
    """The validator of an entry but for its resource, and for what both say of one another."""
    return _compiled(_entry(_ANY_URL, {"type": "object"}, _request() if asks else None)).is_valid


@lru_cache(maxsize=16)
def bundle_head(known: Registry) -> Valid:
    """The validator of a Bundle but for its entries."""
    builder = SchemaBuilder(known)
    head = builder.bundle_head()
    head["properties"]["entry"] = {"type": "array", "minItems": 1, "items": {"type": "object"}}
    return _compiled({**head, "$defs": builder.definitions}).is_valid


@lru_cache(maxsize=4096)
def fitting(known: Registry, what: What, keys: tuple[str, ...]) -> Ready | None:
    """The form of a resource, if these keys may stand together at its root: settled once for a set of keys.

    None too for a type, or a profile, that no schema can settle.
    """
    found = form(known, what)
    if found is None or not found[0].is_valid(dict.fromkeys(keys)):
        return None
    _, validator, fit = found
    return Ready(
        validator.is_valid,
        checks=tuple((key, fit.checks[key]) for key in keys if key in fit.checks),
        components="component" in keys and any(key.startswith("value") for key in keys),
        targets={key: step for key, step in fit.targets.items() if key in keys},
    )


@lru_cache(maxsize=512)
def form(known: Registry, what: What) -> tuple[Draft202012Validator, Draft202012Validator, Form] | None:
    """The validators of the keys at a resource's root and of the rest, and the form they were made of."""
    builder = SchemaBuilder(known)
    found = fast_profiles.form(builder, *what)
    if found is None:
        return None
    return _compiled(found.presence), _closed(found.schema, builder), found


def _entry(url: Schema, resource: Schema, request: Schema | None) -> Schema:
    properties = {"fullUrl": url, "resource": resource}
    if request is not None:
        properties["request"] = request
    required = sorted(properties)
    return {"type": "object", "properties": properties, "required": required, "additionalProperties": False}


def _request(kind: str = "") -> Schema:
    """A request to write a resource, of one type if that is given, by its type or a search."""
    address = {"type": "string", "pattern": "^[!-~]+$"}
    request: Schema = {
        "type": "object",
        "properties": {"method": {"enum": ["POST", "PUT"]}, "url": address, "ifNoneExist": address},
        "required": ["method", "url"],
        "additionalProperties": False,
    }
    if kind:
        request["anyOf"] = [
            {"properties": {"method": {"enum": ["PUT"]}, "url": {"pattern": rf"^{kind}\?"}}},
            {"properties": {"method": {"enum": ["POST"]}, "url": {"enum": [kind]}}},
        ]
    return request


def _closed(schema: Schema, builder: SchemaBuilder) -> Draft202012Validator:
    """Compiled, tidied and together with the definitions that it refers to."""
    logic = Logic(builder.definitions)
    definitions = {key: logic.tidy(held) for key, held in builder.definitions.items()}
    return _compiled({**logic.tidy(schema), "$defs": definitions})


def _compiled(schema: Schema) -> Draft202012Validator:
    return Draft202012Validator(schema, pattern_options=RegexOptions(), validate_formats=True)
