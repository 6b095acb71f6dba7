"""The fast pass: settles a resource that is plainly right, without a walk; the rest goes the thorough way.

A generated schema (see `fast_schema`) is run by jsonschema-rs without call-backs. What it cannot say of a
Bundle (targets in other entries, full URLs twice) is looked at here. Whatever is accepted has exactly the
issues returned, as the thorough pass would say; whatever is refused may still be right.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from functools import lru_cache
from typing import Any

from jsonschema_rs import Draft202012Validator, RegexOptions

from fhirgallop.conformance import fast_profiles
from fhirgallop.conformance.fast_formats import ID, UUID
from fhirgallop.conformance.fast_logic import Logic
from fhirgallop.conformance.fast_residue import Check, codes_apart
from fhirgallop.conformance.fast_schema import Form, Schema, SchemaBuilder
from fhirgallop.conformance.fast_walk import judged_well, no_narrative, without_narrative
from fhirgallop.conformance.registry import Registry
from fhirgallop.conformance.vital_signs import PROFILES as VITAL_SIGNS
from fhirgallop.conformance.vital_signs import profiles_for
from fhirgallop.outcome import Issue

_KINDS = {"transaction": True, "batch": True, "collection": False}
_LONG = re.compile(rb"[0-9.]{17}")


def settle(
    value: Any, known: Registry, text: bytes | None = None, *, same: bool = False
) -> list[Issue] | None:
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
    elif _accepted(value, kind, known) is None:
        return None
    else:
        missing = [] if "text" in value or kind in no_narrative(known) else [kind]
    if missing is None:
        return None
    if not missing:
        return []
    # the place of a missing narrative in a text has to be found
    return without_narrative(value, missing, known) if text is None else None


@dataclass(frozen=True, slots=True)
class _Ready:
    """A compiled form for resources with certain keys.

    Attributes:
        is_valid: the validator.
        checks: keys whose values are looked at apart, with the check.
        components: whether codes of components are to be compared with the resource's own.
        single: keys with a single reference, and the resource types it may lead to.
        many: keys with a list of references, likewise.
        deeper: keys of nested types that hold references, and where in them.
    """

    is_valid: Callable[[object], bool]
    checks: tuple[tuple[str, Check], ...]
    components: bool
    single: tuple[tuple[str, frozenset[str]], ...]
    many: tuple[tuple[str, frozenset[str]], ...]
    deeper: tuple[tuple[str, Mapping[str, Any]], ...]


def _accepted(resource: dict[str, Any], kind: str, known: Registry) -> _Ready | None:
    """The form that a single resource was found to have; None when it is in doubt."""
    try:
        declared: tuple[str, ...] = ()
        if "meta" in resource and "profile" in resource["meta"]:
            declared = tuple(resource["meta"]["profile"])
        implied = _implied(resource) if kind == "Observation" else ()
        ready = _fitting(known, kind, declared, implied, tuple(resource))
        if ready is None or not ready.is_valid(resource):
            return None
        if ready.components and not codes_apart(resource):
            return None
        return None if ready.checks and not all(c(resource[key]) for key, c in ready.checks) else ready
    except (ValueError, TypeError, AttributeError, KeyError, OverflowError, RecursionError):
        return None  # not what JSON can hold, or of the wrong shape: the walk says what it is


def _implied(observation: dict[str, Any]) -> tuple[str, ...]:
    """The profiles that vital-signs codes ask for."""
    for coding in observation["code"].get("coding", ()):
        if coding.get("code") in VITAL_SIGNS:
            return tuple(dict.fromkeys(profiles_for(observation)))
    return ()


@lru_cache(maxsize=4096)
def _fitting(
    known: Registry, kind: str, declared: tuple[str, ...], implied: tuple[str, ...], keys: tuple[str, ...]
) -> _Ready | None:
    """The form of a resource, if these keys may stand together at its root: settled once for a set of keys.

    None too for a type, or a profile, that no schema can settle.
    """
    found = _form(known, kind, declared, implied)
    if found is None or not found[0].is_valid(dict.fromkeys(keys)):
        return None
    _, validator, form = found
    targets = tuple((key, form.targets[key]) for key in keys if key in form.targets)
    children = {key: known.edition.child(kind, key) for key, _ in targets}
    lists = {key for key, child in children.items() if child is not None and child.element.many}
    return _Ready(
        validator.is_valid,
        checks=tuple((key, form.checks[key]) for key in keys if key in form.checks),
        components="component" in keys and any(key.startswith("value") for key in keys),
        single=tuple((k, step) for k, step in targets if isinstance(step, frozenset) and k not in lists),
        many=tuple((k, step) for k, step in targets if isinstance(step, frozenset) and k in lists),
        deeper=tuple((k, step) for k, step in targets if not isinstance(step, frozenset)),
    )


@lru_cache(maxsize=512)
def _form(
    known: Registry, kind: str, declared: tuple[str, ...], implied: tuple[str, ...]
) -> tuple[Draft202012Validator, Draft202012Validator, Form] | None:
    builder = SchemaBuilder(known)
    form = fast_profiles.form(builder, kind, declared, implied)
    if form is None:
        return None
    logic = Logic(builder.definitions)
    definitions = {key: logic.tidy(schema) for key, schema in builder.definitions.items()}
    return _compiled(form.presence), _compiled({**logic.tidy(form.schema), "$defs": definitions}), form


def _bundle(value: dict[str, Any], known: Registry, text: bytes | None) -> list[str] | None:
    """Expressions of the resources without narrative; None when something in the Bundle is in doubt."""
    kind = value.get("type")
    asks = _KINDS.get(kind) if type(kind) is str else None
    if asks is None or not _valid(_envelope(known, asks), value):
        return None
    entries = value["entry"]
    urls = {entry["fullUrl"]: entry["resource"].get("resourceType") for entry in entries}
    if len(urls) != len(entries):
        return None
    doubtful: list[int] = []
    missing: list[str] = []
    for index, (entry, kind) in enumerate(zip(entries, urls.values(), strict=True)):
        resource = entry["resource"]
        if type(kind) is not str or not _consistent(entry, resource, kind):
            return None
        ready = _accepted(resource, kind, known)
        if ready is None:
            doubtful.append(index)
            if len(doubtful) > max(4, len(entries) // 4):
                return None
        elif not _targets_right(resource, ready, urls):
            return None
        elif "text" not in resource and kind not in no_narrative(known):
            missing.append(f"Bundle.entry[{index}].resource")
    return missing if not doubtful or judged_well(value, text, doubtful, known) else None


def _consistent(entry: Mapping[str, Any], resource: Mapping[str, Any], kind: str) -> bool:
    """Whether fullUrl and request agree with the resource's type and id, as the bundles clause asks."""
    place = f"{kind}/{resource['id']}" if "id" in resource else None
    url = entry["fullUrl"]
    if url[:9] != "urn:uuid:" and (place is None or not url.endswith(f"/{place}")):
        return False
    if "request" not in entry:
        return True
    request = entry["request"]
    asked = request["url"]
    if request["method"] == "POST":
        return bool(asked == kind)
    return bool(asked == place or asked.partition("?")[0] == kind != asked)


def _targets_right(resource: Mapping[str, Any], ready: _Ready, urls: Mapping[str, str]) -> bool:
    """Whether every urn:uuid reference that is a full URL of the Bundle leads to a type allowed."""
    for key, allowed in ready.single:
        held = resource[key]
        if "reference" in held and (led := urls.get(held["reference"])) and led not in allowed:
            return False
    for key, allowed in ready.many:
        for held in resource[key]:
            if "reference" in held and (led := urls.get(held["reference"])) and led not in allowed:
                return False
    return not ready.deeper or all(_led_right(resource[key], plan, urls) for key, plan in ready.deeper)


def _led_right(value: Any, plan: Mapping[str, Any], urls: Mapping[str, str]) -> bool:
    """The same of a nested type."""
    for held in value if type(value) is list else (value,):
        for key, step in plan.items():
            if key not in held:
                continue
            if type(step) is dict:
                if not _led_right(held[key], step, urls):
                    return False
                continue
            for item in held[key] if type(held[key]) is list else (held[key],):
                led = urls.get(item.get("reference"))
                if led is not None and led not in step:
                    return False
    return True


def _valid(validator: Draft202012Validator, value: object) -> bool:
    """False also for what JSON cannot hold: the thorough pass says what that is."""
    try:
        return validator.is_valid(value)
    except (ValueError, TypeError, OverflowError, RecursionError):
        return False


@lru_cache(maxsize=16)
def _envelope(known: Registry, asks: bool) -> Draft202012Validator:
    """The validator of a Bundle but for its resources; `asks`: each entry carries a request."""
    builder = SchemaBuilder(known)
    bundle = builder.bundle_head()
    properties: Schema = {
        "resource": {"type": "object"},
        "fullUrl": {"type": "string", "pattern": rf'^({UUID}|https?://[!"$->@-~]+/[A-Z][A-Za-z]+/{ID})$'},
    }
    if asks:
        properties["request"] = {
            "type": "object",
            "properties": {
                "method": {"enum": ["POST", "PUT"]},
                "url": {"type": "string", "pattern": "^[!-~]+$"},
                "ifNoneExist": {"type": "string", "pattern": "^[!-~]+$"},
            },
            "required": ["method", "url"],
            "additionalProperties": False,
        }
    entry = {
        "type": "object",
        "properties": properties,
        "required": sorted(properties),
        "additionalProperties": False,
    }
    bundle["properties"]["entry"] = {"type": "array", "minItems": 1, "items": entry}
    return _compiled({**bundle, "$defs": builder.definitions})


def _compiled(schema: Schema) -> Draft202012Validator:
    return Draft202012Validator(schema, pattern_options=RegexOptions(), validate_formats=True)
