"""Clause: slices of a profile: which slice an element belongs to, how many each has, closed and in order.

Discriminators: value, pattern, type, exists, profile. Source: FHIR "Slicing" (R4, R4B, R5).
"""

from __future__ import annotations

import re
from collections.abc import Callable, Iterator, Mapping, Sequence
from typing import Any

from fhirgallop.conformance.bindings import among
from fhirgallop.conformance.node import Node
from fhirgallop.conformance.profile_tree import Rule
from fhirgallop.conformance.registry import Registry
from fhirgallop.conformance.values import contains, equal
from fhirgallop.outcome import Issue

Resolve = Callable[[Node, str], Node | None]
Conforms = Callable[[Node, str], bool]

_STEP = re.compile(r"\.(?![^(]*\))")
_EXTENSION = re.compile(r"extension\(['\"]([^'\"]+)['\"]\)")


class Slicer:
    """Puts the nodes of one sliced element into its slices."""

    def __init__(self, rule: Rule, registry: Registry, resolve: Resolve, conforms: Conforms) -> None:
        self._rule = rule
        self._registry = registry
        self._resolve = resolve
        self._conforms = conforms
        self.discriminators = rule.slicing.discriminators if rule.slicing else ()
        if not self.discriminators and rule.name.endswith("[x]"):
            self.discriminators = (("type", "$this"),)
        if not self.discriminators and rule.name in ("extension", "modifierExtension"):
            self.discriminators = (("value", "url"),)

    def slice_of(self, node: Node) -> str | None:
        """Name of the slice the node belongs to, or None."""
        for name, rule in self._rule.slices.items():
            if self.discriminators and all(
                self._fits(node, name, rule, k, p) for k, p in self.discriminators
            ):
                return name
        return None

    def judgeable(self) -> bool:
        """Whether the discriminators are ones that can be evaluated here."""
        return bool(self.discriminators) and all(
            kind in ("value", "pattern", "type", "exists", "profile") and _supported(path)
            for kind, path in self.discriminators
        )

    @staticmethod
    def expected(rule: Rule, path: str) -> list[tuple[str, Any]]:
        """What a slice asks for at a discriminator's path: ("fixed" | "pattern" | "binding", value) pairs."""
        found = list(_expected(rule, [] if path == "$this" else _STEP.split(path)))
        if not found and path == "url":
            found = [("fixed", p) for t in rule.types for p in t.profiles]
        return found

    def _fits(self, node: Node, name: str, rule: Rule, kind: str, path: str) -> bool:
        if kind == "type":
            return self._fits_type(node, name, rule, path)
        if kind == "profile":
            profiles = [p for r in _rules_at(rule, path) for t in r.types for p in (*t.profiles, *t.targets)]
            targets = _nodes_at(node, path, self._resolve)
            return any(self._conforms(target, p) for target in targets for p in profiles)
        values = _values_at(node.value, path)
        if kind == "exists":
            rules = _rules_at(rule, path)
            if any(r.max == 0 for r in rules):
                return not values
            return bool(values) if any(r.min > 0 for r in rules) else True
        return self._fits_value(values, rule, path)

    def _fits_value(self, values: Sequence[Any], rule: Rule, path: str) -> bool:
        expected = list(self.expected(rule, path))
        if not expected:
            return False
        for how, want in expected:
            for value in values:
                if how == "fixed" and equal(value, want):
                    return True
                if how == "pattern" and contains(value, want):
                    return True
                if how == "binding" and among(want, _codes(value), self._registry):
                    return True
        return False

    def _fits_type(self, node: Node, name: str, rule: Rule, path: str) -> bool:
        wanted = {t.code for r in _rules_at(rule, path) for t in r.types}
        if "resolve()" in path:
            wanted = {
                t.rpartition("/")[2] for r in _rules_at(rule, path) for ref in r.types for t in ref.targets
            } or wanted
            return any(n.type_name in wanted for n in _nodes_at(node, path, self._resolve))
        if path != "$this":
            return any(_type_of(value) in wanted for value in _values_at(node.value, path))
        if len(wanted) != 1 and node.element is not None and node.element.is_choice and node.key == name:
            return True
        code = node.step.partition("ofType(")[2].rstrip(")") or node.type_name
        return code in wanted


def check(
    node: Node, rule: Rule, members: Sequence[tuple[Node, str | None]], profile: str
) -> Iterator[Issue]:
    """Issues of how many stand in each slice, of strangers in a closed slicing, and of order."""
    slicing = rule.slicing
    counts: dict[str, int] = dict.fromkeys(rule.slices, 0)
    for member, name in members:
        if name is not None:
            counts[name] += 1
        elif slicing is not None and slicing.rules == "closed":
            said = f"Profile {profile} takes no other '{rule.name}' than its own slices. Remove this one."
            yield Issue("error", "structure", "slice-closed", said, expression=member.expression)
    for name, count in counts.items():
        part = rule.slices[name]
        if count < part.min:
            said = (
                f"Profile {profile} asks for at least {part.min} '{rule.name}' of the slice {name}. Add it."
            )
            yield Issue("error", "required", "slice-min", said, expression=node.expression)
        elif part.max is not None and count > part.max:
            said = (
                f"Profile {profile} takes at most {part.max} '{rule.name}' of the slice {name}. Remove some."
            )
            yield Issue("error", "structure", "slice-max", said, expression=node.expression)
    if slicing is not None:
        yield from _order(rule, members, profile)


def _order(rule: Rule, members: Sequence[tuple[Node, str | None]], profile: str) -> Iterator[Issue]:
    slicing = rule.slicing
    if slicing is None:
        return
    place = {name: i for i, name in enumerate(rule.slices)}
    reached, strangers = -1, False
    for member, name in members:
        if name is None:
            strangers = True
            continue
        wrong = slicing.ordered and place[name] < reached
        wrong = wrong or (slicing.rules == "openAtEnd" and strangers)
        if wrong:
            said = (
                f"Profile {profile} fixes the order of '{rule.name}', and this stands too late. Move it up."
            )
            yield Issue("error", "structure", "slice-order", said, expression=member.expression)
            return
        reached = max(reached, place[name])


def _supported(path: str) -> bool:
    return all(
        step == "$this"
        or step.isidentifier()
        or step == "resolve()"
        or _OF_TYPE.fullmatch(step)
        or _EXTENSION.fullmatch(step)
        for step in _STEP.split(path)
    )


_OF_TYPE = re.compile(r"ofType\((\w+)\)", re.ASCII)


def _values_at(value: Any, path: str) -> list[Any]:
    """Values under a simple path of the JSON, arrays opened, choices found under any of their keys."""
    found = [value]
    for step in [] if path == "$this" else _STEP.split(path):
        found = [inner for item in found for inner in _step(item, step)]
    return found


def _step(item: Any, step: str) -> list[Any]:
    if not isinstance(item, Mapping):
        return [item] if _OF_TYPE.fullmatch(step) or step == "$this" else []
    if step == "$this" or _OF_TYPE.fullmatch(step):
        return [item]
    extension = _EXTENSION.fullmatch(step)
    if extension:
        held = item.get("extension")
        return [
            e for e in (held if isinstance(held, list) else ())
            if isinstance(e, Mapping) and e.get("url") == extension.group(1)
        ]  # fmt: skip
    found = item.get(step)
    if found is None:
        size = len(step)
        found = next(
            (
                v
                for k, v in item.items()
                if isinstance(k, str) and k.startswith(step) and k[size : size + 1].isupper()
            ),
            None,
        )
    if found is None:
        return []
    return found if isinstance(found, list) else [found]


def _nodes_at(node: Node, path: str, resolve: Resolve) -> list[Node]:
    if path == "$this":
        return [node]
    before, _, _ = path.partition("resolve()")
    values = _values_at(node.value, before.rstrip(".") or "$this")
    found = []
    for value in values:
        reference = value.get("reference") if isinstance(value, Mapping) else None
        target = resolve(node, reference) if isinstance(reference, str) else None
        if target is not None:
            found.append(target)
    return found


def _rules_at(rule: Rule, path: str) -> list[Rule]:
    rules = [rule]
    for step in [] if path == "$this" else _STEP.split(path):
        if step in ("resolve()", "$this") or _OF_TYPE.fullmatch(step):
            continue
        rules = [c for r in rules for c in _child_rules(r, step)]
    return rules


def _child_rules(rule: Rule, step: str) -> list[Rule]:
    found = rule.children.get(step) or rule.children.get(step + "[x]")
    if found is None:
        extension = _EXTENSION.fullmatch(step)
        held = rule.children.get("extension") if extension else None
        if held is None or extension is None:
            return []
        return [s for s in held.slices.values() if any(extension.group(1) in t.profiles for t in s.types)]
    return [found, *found.slices.values()]


def _expected(rule: Rule, steps: Sequence[str]) -> Iterator[tuple[str, Any]]:
    """What a slice fixes at a discriminator's path, said there or by a value fixed above it."""
    for how, want in (("fixed", rule.fixed), ("pattern", rule.pattern)):
        if want is not None:
            for value in _values_at(want, ".".join(steps) or "$this"):
                yield how if isinstance(value, (Mapping, list)) or how == "fixed" else "fixed", value
    if not steps:
        if (
            rule.binding is not None
            and rule.binding.strength == "required"
            and rule.fixed is None
            and rule.pattern is None
        ):
            yield "binding", rule.binding.value_set
        return
    if steps[0] in ("resolve()", "$this") or _OF_TYPE.fullmatch(steps[0]):
        yield from _expected(rule, steps[1:])
        return
    for child in _child_rules(rule, steps[0]):
        yield from _expected(child, steps[1:])


def _codes(value: Any) -> list[tuple[str | None, str]]:
    if isinstance(value, str):
        return [(None, value)]
    if not isinstance(value, Mapping):
        return []
    held = value.get("coding")
    return [
        (str(coding.get("system", "")), coding["code"])
        for coding in (held if isinstance(held, list) else [value])
        if isinstance(coding, Mapping) and isinstance(coding.get("code"), str)
    ]


def _type_of(value: Any) -> str:
    return str(value.get("resourceType", "")) if isinstance(value, Mapping) else ""
