"""Narrows the schema of the fast pass by a profile, so that what it accepts meets the profile too.

A profile that says more than can be said here (see `narrow`) makes the fast pass refuse: the thorough
pass judges such resources. Every step may refuse too much, never too little.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from copy import deepcopy
from dataclasses import replace
from itertools import combinations
from typing import Any
from urllib.parse import unquote

from fhirgallop.conformance.editions.model import Binding, Child, TypeDef, TypeRef
from fhirgallop.conformance.fast_invariants import REFUSED, fragment
from fhirgallop.conformance.fast_logic import Logic, containing, never_both
from fhirgallop.conformance.fast_schema import (
    Form,
    Schema,
    SchemaBuilder,
    add_fragment,
    ask,
    keys_of,
    require,
)
from fhirgallop.conformance.profile_tree import SD, Profile, Rule, read_profile
from fhirgallop.conformance.slicing import Slicer

MAX_PROFILES = 3


class Unsupported(Exception):  # noqa: N818 - a signal: this profile is for the thorough pass
    """The profile says something that no schema here can hold."""


def form(
    builder: SchemaBuilder, name: str, declared: tuple[str, ...] = (), implied: tuple[str, ...] = ()
) -> Form | None:
    """How a resource may look that declares profiles and is to meet others; None: no schema can say."""
    asked = dict.fromkeys((*declared, *implied))
    if len(asked) > MAX_PROFILES or any(builder.registry.profile(url) is None for url in asked):
        return None
    schema = builder.resource(name)
    if schema is REFUSED:
        return None
    definition = builder.edition.type(name)
    narrowing = _Narrowing(builder)
    targets = builder.targets(name)
    try:
        for url in asked:
            profile = read_profile(url, builder.registry)
            if profile is None or profile.type != name or definition is None:
                return None
            narrowing.root(schema, profile, definition, targets)
    except Unsupported:
        return None
    if declared:
        meta = builder.copy("Meta")
        if meta is REFUSED:
            return None
        meta["properties"]["profile"] = {"enum": [list(declared)]}
        meta["required"] = ["profile"]
        schema["properties"]["meta"] = meta
        ask(schema, ("meta",))
    found = builder.form(name, schema)
    found.targets = targets
    return found


class _Narrowing:
    """Lays the rules of a profile over schemas."""

    def __init__(self, builder: SchemaBuilder) -> None:
        self._builder = builder
        self._logic = Logic(builder.definitions)

    def root(self, schema: Schema, profile: Profile, definition: TypeDef, targets: dict[str, Any]) -> None:
        """Narrows a resource's schema, and the types its references may lead to inside a Bundle."""
        self._object(schema, profile.root, definition, urn=self._builder.urn)
        for name, rule in profile.root.children.items():
            wanted = self._targets(rule.types)
            for key in keys_of(definition, name, schema) if wanted else ():
                if definition.keys[key].type_name == "Reference":
                    targets[key] = frozenset(self._builder.kinds(wanted))

    def _object(self, schema: Schema, rule: Rule, definition: TypeDef, *, urn: bool) -> None:
        held = {i.key for i in definition.invariants}
        for invariant in rule.invariants:
            if invariant.key not in held:
                addition = fragment(invariant.key, invariant.expression)
                if addition is None or "text" in addition:
                    raise Unsupported
                add_fragment(schema, definition, addition)
        for name, part in rule.children.items():
            if name in definition.elements:
                self._element(schema, name, part, definition, urn=urn)

    def _element(self, schema: Schema, name: str, rule: Rule, definition: TypeDef, *, urn: bool) -> None:
        if name in ("extension", "modifierExtension"):
            if rule.min or any(s.min for s in rule.slices.values()):
                raise Unsupported
            return  # there are none in what the fast pass takes
        properties = schema["properties"]
        codes = {t.code for t in rule.types}
        closed = rule.slicing is not None and rule.slicing.rules == "closed"
        for key in keys_of(definition, name, schema):
            child = definition.keys[key]
            choice = child.element.is_choice
            if rule.max == 0 or (
                choice and ((codes and child.code not in codes) or (closed and key not in rule.slices))
            ):
                del properties[key]
                continue
            found = self._key(properties[key], rule, child, urn=urn)
            if found is not REFUSED and choice and key in rule.slices:
                found = self._value(found, rule.slices[key], child.type_name, urn=urn)
            if found is REFUSED:
                del properties[key]
            else:
                properties[key] = found
        needed = rule.min or any(s.min for s in rule.slices.values())
        if needed and not require(schema, definition, name):
            raise Unsupported

    def _key(self, schema: Schema, rule: Rule, child: Child, *, urn: bool) -> Schema:
        if not child.element.many:
            return self._value(schema, rule, child.type_name, urn=urn)
        items = self._value(schema["items"], rule, child.type_name, urn=urn)
        if items is REFUSED:
            return REFUSED
        array = {**schema, "items": items}
        if rule.min > 1:
            array["minItems"] = rule.min
        if rule.max is not None:
            array["maxItems"] = rule.max
        if rule.slices:
            self._slices(array, rule, child.type_name, urn=urn)
        return array

    def _value(self, schema: Schema, rule: Rule, type_name: str, *, urn: bool) -> Schema:
        definition = self._builder.edition.type(type_name)
        if definition is None or any(t.profiles for t in rule.types):
            raise Unsupported
        targets = self._targets(rule.types)
        if type_name == "Reference" and targets:
            schema = self._builder.reference(targets, urn=urn)
            if schema is REFUSED:
                return REFUSED
        extra: list[Schema] = []
        if rule.fixed is not None:
            extra.append({"enum": [rule.fixed]})
        if rule.pattern is not None:
            extra.append(containing(rule.pattern))
        if rule.max_length:
            extra.append({"maxLength": rule.max_length})
        if rule.binding is not None:
            extra.append(self._bound(rule.binding, type_name, definition))
        if definition.kind == "primitive":
            additions = [fragment(i.key, i.expression) for i in rule.invariants]
            extra.extend((addition or {}).get("text", REFUSED) for addition in additions)
        elif rule.children or rule.invariants:
            schema = self._opened(schema)
            try:
                self._object(schema, _of_objects(rule), definition, urn=False)
            except Unsupported:
                return REFUSED
        return {**schema, "allOf": [*schema.get("allOf", ()), *extra]} if extra else schema

    def _bound(self, binding: Binding, type_name: str, definition: TypeDef) -> Schema:
        if definition.kind == "primitive":
            found = self._builder.codes(binding)
        else:
            found = self._builder.bound(type_name, binding)
        if found is REFUSED:
            raise Unsupported
        return found

    def _opened(self, schema: Schema) -> Schema:
        """The object schema behind a `$ref`, as a copy of its own."""
        if "$ref" in schema:
            opened = deepcopy(self._builder.definitions[unquote(schema["$ref"].removeprefix("#/$defs/"))])
            more = [*opened.get("allOf", ()), *schema.get("allOf", ())]
            return {**opened, "allOf": more} if more else opened
        if "properties" not in schema:
            raise Unsupported
        return deepcopy(schema)

    def _slices(self, array: Schema, rule: Rule, type_name: str, *, urn: bool) -> None:
        """Each slice as what its members must be, and how many may be; no item may be in two of them."""
        slicing = rule.slicing
        if slicing is None or slicing.ordered or slicing.rules == "openAtEnd":
            raise Unsupported
        items = self._opened(array["items"])
        matches = {name: self._match(rule, part, type_name) for name, part in rule.slices.items()}
        each: list[Schema] = [
            {"not": {"allOf": [one, other]}}
            for one, other in combinations(matches.values(), 2)
            if not never_both(one, other)
        ]
        counts: list[Schema] = []
        for name, part in rule.slices.items():
            if part.slices:
                raise Unsupported
            match = matches[name]
            member = self._logic.beyond(self._value(array["items"], part, type_name, urn=urn), [items, match])
            if type_name == "Coding":
                ask(items, member.pop("required", ()))  # of all alike: few codings have no code
            if member:
                each.append({"if": match, "then": member})
            if part.min or part.max is not None:
                most = {} if part.max is None else {"maxContains": part.max}
                counts.append({"contains": match, "minContains": part.min, **most})
        if slicing.rules == "closed":
            each.append({"anyOf": list(matches.values())})
        array["items"] = {**items, "allOf": [*items.get("allOf", ()), *each]} if each else items
        if counts:
            array["allOf"] = [*array.get("allOf", ()), *counts]

    def _match(self, rule: Rule, part: Rule, type_name: str) -> Schema:
        """What an item must be to belong to a slice: one value at one path for each discriminator."""
        needs: list[Schema] = []
        for kind, path in rule.slicing.discriminators if rule.slicing else ():
            expected = list({repr(e): e for e in Slicer.expected(part, path)}.values())
            if kind not in ("value", "pattern") or len(expected) != 1:
                raise Unsupported
            how, want = expected[0]
            if how == "binding" or isinstance(want, Mapping | list):
                raise Unsupported
            needs.append(self._at(path.split("."), type_name, {"enum": [want]}))
        if not needs:
            raise Unsupported
        return needs[0] if len(needs) == 1 else {"allOf": needs}

    def _at(self, steps: Sequence[str], type_name: str, inner: Schema) -> Schema:
        """A schema that asks for a value at a path, in any place where there are many."""
        if not steps:
            return inner
        place = self._builder.edition.child(type_name, steps[0])
        if place is None or place.element.is_choice:
            raise Unsupported
        deeper = self._at(steps[1:], place.type_name, inner)
        held = {"type": "array", "contains": deeper} if place.element.many else deeper
        return {"properties": {steps[0]: held}, "required": [steps[0]]}

    def _targets(self, types: tuple[TypeRef, ...]) -> tuple[str, ...]:
        """Names of the resource types that a profile lets a reference lead to."""
        found: list[str] = []
        for ref in types:
            for url in ref.targets:
                name = url.partition("|")[0].removeprefix(SD)
                if name not in self._builder.edition.resources:
                    definition = self._builder.registry.profile(url)
                    name = str(definition.get("type", "")) if definition else name
                if name == "Resource":
                    return ()
                if name not in self._builder.edition.resources:
                    raise Unsupported
                found.append(name)
        return tuple(found)


def _of_objects(rule: Rule) -> Rule:
    """The rule without invariants of a moment's precision, which hold of any other type of value."""
    return replace(
        rule,
        invariants=[i for i in rule.invariants if "text" not in (fragment(i.key, i.expression) or ())],
    )
