"""Clause: profiles: what meta.profile, a caller or a vital-signs code asks beyond the base specification.

Source: FHIR "Profiling FHIR", ElementDefinition (R4, R4B, R5).
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from typing import Any

from fhirgallop.conformance import bindings, invariants, references, slicing, structure
from fhirgallop.conformance.editions.model import TypeRef
from fhirgallop.conformance.node import Node, Scope
from fhirgallop.conformance.profile_tree import SD, Profile, Rule, read_profile
from fhirgallop.conformance.registry import Registry
from fhirgallop.conformance.values import contains, equal
from fhirgallop.conformance.wording import canonical, one_of
from fhirgallop.outcome import Issue

_DEEPEST = 12


class Judge:
    """Judges nodes by profiles; profiles are read once and kept for the judgement."""

    def __init__(self, registry: Registry, scope: Scope) -> None:
        self._registry = registry
        self._scope = scope
        self._profiles: dict[str, Profile | None] = {}
        self._depth = 0

    def check(self, node: Node, url: str) -> Iterator[Issue]:
        """Issues of one resource (or element) by the profile of that canonical."""
        plain = url.partition("|")[0]
        if plain == SD + node.type_name:
            return
        if plain not in self._profiles:
            self._profiles[plain] = read_profile(plain, self._registry)
        profile = self._profiles[plain]
        if profile is None:
            if plain.startswith(SD) and plain.removeprefix(SD) in self._registry.edition.types:
                said = f"The profile {canonical(plain)} is not for {node.type_name}. Correct it."
                yield Issue("error", "structure", "profile-type", said, expression=node.expression)
                return
            said = (
                f"The profile {canonical(plain)} is not known here, so it was not judged. Load its package."
            )
            yield Issue("warning", "not-found", "profile-unknown", said, expression=node.expression)
        elif not self._registry.edition.is_a(node.type_name, profile.type):
            said = (
                f"The profile {canonical(plain)} is for {profile.type}, not for {node.type_name}. Correct it."
            )
            yield Issue("error", "structure", "profile-type", said, expression=node.expression)
        else:
            yield from self._value(node, profile.root, canonical(plain))
            yield from self._children(node, profile.root, canonical(plain))

    def conforms(self, node: Node, url: str) -> bool:
        """Whether a node meets a profile (or is of the base type named) without an error."""
        if self._depth >= _DEEPEST:
            return False
        plain = url.partition("|")[0]
        if plain.startswith(SD) and plain.removeprefix(SD) in self._registry.edition.resources:
            return node.type_name == plain.removeprefix(SD)
        self._depth += 1
        try:
            issues = list(self.check(node, url))
        finally:
            self._depth -= 1
        return not any(issue.is_error or issue.rule == "profile-unknown" for issue in issues)

    def _children(self, node: Node, rule: Rule, profile: str) -> Iterator[Issue]:
        if not rule.children:
            return
        by_name: dict[str, list[Node]] = {}
        opened: list[Issue] = []
        edition = self._registry.edition
        is_object = isinstance(node.value, Mapping)
        opener = structure.open_node if is_object else structure.open_primitive
        for child in opener(node, edition, opened):
            if child.element is not None:
                by_name.setdefault(child.element.name, []).append(child)
        definition = edition.type(node.type_name)
        for name, part in rule.children.items():
            if definition is None or name not in definition.elements:
                continue
            nodes = by_name.get(name, [])
            if not nodes and _holds(node, name, definition.keys):
                continue  # there, but of the wrong shape: said by the structure clause
            base = definition.elements[name]
            found = list(self._members(node, part, nodes, profile))
            if not any(
                issue.rule == "slice-min" for issue in found
            ):  # which says more exactly what is missing
                yield from _bounds(node, part, len(nodes), base.min, base.max, profile)
            yield from found

    def _members(self, node: Node, rule: Rule, nodes: Sequence[Node], profile: str) -> Iterator[Issue]:
        members: list[tuple[Node, str | None]] = []
        slicer = (
            slicing.Slicer(rule, self._registry, self._scope.resolve, self.conforms) if rule.slices else None
        )
        if slicer is not None and not slicer.judgeable():
            said = f"Profile {profile} tells slices of '{rule.name}' apart in a way not judged here."
            yield Issue("warning", "not-supported", "slice-not-judged", said, expression=node.expression)
            slicer = None
        for member in nodes:
            wrong = list(self._types(member, rule.types, profile))
            yield from wrong
            if wrong:
                continue  # of a type that is not allowed: nothing else is asked of it
            yield from self._value(member, rule, profile)
            yield from self._children(member, rule, profile)
            name = slicer.slice_of(member) if slicer else None
            members.append((member, name))
            if name is not None:
                yield from self._types(member, rule.slices[name].types, profile)
                yield from self._value(member, rule.slices[name], profile)
                yield from self._children(member, rule.slices[name], profile)
                if rule.slices[name].slices:
                    yield from self._members(node, _as_sliced(rule.slices[name]), [member], profile)
        if slicer is not None:
            yield from slicing.check(node, rule, members, profile)

    def _value(self, node: Node, rule: Rule, profile: str) -> Iterator[Issue]:
        value, at = node.value, node.expression
        if value is not None and rule.fixed is not None and not equal(value, rule.fixed):
            said = (
                f"Profile {profile} fixes the value of this element, and this is another. Use the fixed one."
            )
            yield Issue("error", "value", "fixed-value", said, expression=at)
        elif value is not None and rule.pattern is not None and not contains(value, rule.pattern):
            said = (
                f"Profile {profile} asks for a pattern that this element lacks. Add what the pattern holds."
            )
            yield Issue("error", "value", "pattern-value", said, expression=at)
        if rule.binding is not None:
            yield from bindings.check_binding(node, rule.binding, self._registry)
        if rule.max_length and isinstance(value, str) and len(value) > rule.max_length:
            said = f"Profile {profile} allows at most {rule.max_length} characters here. Shorten the text."
            yield Issue("error", "too-long", "primitive-length", said, expression=at)
        held = _keys_held(node, self._registry)
        for invariant in rule.invariants:
            if invariant.key not in held:
                yield from invariants.check_one(node, invariant, self._scope)

    def _types(self, node: Node, types: Sequence[TypeRef], profile: str) -> Iterator[Issue]:
        if not types:
            return
        code = node.step.partition("ofType(")[2].rstrip(")")
        if code and all(t.code != code for t in types):
            allowed = one_of({t.code for t in types})
            said = f"Profile {profile} takes {allowed} here only. Use one of these types."
            yield Issue("error", "structure", "type-not-allowed", said, expression=node.expression)
            return
        if node.type_name == "Reference" and isinstance(node.value, Mapping):
            targets = tuple(t for ref in types if ref.code == "Reference" for t in ref.targets)
            yield from self._target(node, targets, profile)
        if node.type_name == "Extension":
            return  # an extension's own definition is judged by the extensions clause
        profiles = [p for ref in types if ref.code == (code or node.type_name) for p in ref.profiles]
        known = [p for p in profiles if self._registry.profile(p) is not None]
        if known and len(known) == len(profiles) and not any(self.conforms(node, p) for p in known):
            names = one_of(canonical(p) for p in known)
            said = f"Profile {profile} asks that this meets {names}. Make it meet one."
            yield Issue("error", "structure", "profile-of-element", said, expression=node.expression)

    def _target(self, node: Node, targets: Sequence[str], profile: str) -> Iterator[Issue]:
        reference = node.value.get("reference")
        if not targets or not isinstance(reference, str):
            return
        found = references.target_type(node, reference, self._registry.edition, self._scope.resolve)
        wanted = {self._target_type(t) for t in targets}
        if found and "" not in wanted and not any(self._registry.edition.is_a(found, w) for w in wanted):
            said = f"Profile {profile} lets this reference point to {one_of(wanted)} only. Correct it."
            yield Issue("error", "structure", "reference-target", said, expression=node.expression)

    def _target_type(self, url: str) -> str:
        plain = url.partition("|")[0]
        if plain.startswith(SD) and plain.removeprefix(SD) in self._registry.edition.types:
            return plain.removeprefix(SD)
        definition = self._registry.profile(plain)
        return str(definition.get("type", "")) if definition else plain if plain.isalpha() else ""


def declared(node: Node) -> list[str]:
    """The profiles that a resource says it meets."""
    meta = node.value.get("meta") if isinstance(node.value, Mapping) else None
    named = meta.get("profile") if isinstance(meta, Mapping) else None
    # one with white space is no canonical, which the primitives clause says
    return [p for p in named if isinstance(p, str) and p.split() == [p]] if isinstance(named, list) else []


def _as_sliced(rule: Rule) -> Rule:
    """A slice that is sliced again, seen as an element of its own, without what was judged already."""
    return Rule(rule.name, slicing=rule.slicing, slices=rule.slices)


def _holds(node: Node, name: str, keys: Mapping[str, Any]) -> bool:
    held = node.value if isinstance(node.value, Mapping) else node.companion or {}
    return any(key in keys and keys[key].element.name == name for key in held)


def _bounds(
    node: Node, rule: Rule, count: int, base_min: int, base_max: int | None, profile: str
) -> Iterator[Issue]:
    """Too few or too many by the profile; what the base type says already is left to the base clause."""
    stem = rule.name.removesuffix("[x]")
    if base_min <= count < rule.min:
        said = f"Profile {profile} asks for at least {rule.min} '{stem}' here. Add it."
        yield Issue("error", "required", "cardinality-min", said, expression=node.expression)
    elif rule.max is not None and count > rule.max and (base_max is None or count <= base_max):
        said = f"Profile {profile} allows at most {rule.max} '{stem}' here. Remove what is too many."
        yield Issue("error", "structure", "cardinality-max", said, expression=node.expression)


def _keys_held(node: Node, registry: Registry) -> frozenset[str]:
    """Keys of the invariants that the base specification asks of the node, judged by that clause."""
    definition = registry.edition.type(node.type_name)
    own = definition.invariants if definition else ()
    placed = node.element.invariants if node.element else ()
    return frozenset(i.key for i in (*own, *placed))
