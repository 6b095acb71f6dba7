"""Reads a profile (StructureDefinition) into a tree of rules, from its snapshot or its differential.

A differential is laid over the tree of the profile it derives from, so a profile without a snapshot says
all that its line of profiles says. What the base type says is judged by the base clauses.
Source: FHIR StructureDefinition, ElementDefinition, "Profiling FHIR" (R4, R4B, R5).
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import lru_cache
from typing import Any, Literal

from fhirgallop.conformance.editions.model import Binding, Invariant, TypeRef
from fhirgallop.conformance.registry import Registry

Definition = Mapping[str, Any]
SD = "http://hl7.org/fhir/StructureDefinition/"


@dataclass(frozen=True, slots=True)
class Slicing:
    """How an element is sliced: discriminators as (type, path), rules, order."""

    discriminators: tuple[tuple[str, str], ...]
    rules: str
    ordered: bool


@dataclass(slots=True)
class Rule:
    """What a profile says of one element or slice; filled while the tree is read, then left alone."""

    name: str
    min: int = 0
    max: int | None = None
    types: tuple[TypeRef, ...] = ()
    fixed: Any = None
    pattern: Any = None
    binding: Binding | None = None
    max_length: int = 0
    invariants: list[Invariant] = field(default_factory=list)
    slicing: Slicing | None = None
    children: dict[str, Rule] = field(default_factory=dict)
    slices: dict[str, Rule] = field(default_factory=dict)


@dataclass(frozen=True, slots=True)
class Profile:
    """A profile ready to be judged by."""

    url: str
    type: str
    root: Rule


@lru_cache(maxsize=512)
def read_profile(url: str, registry: Registry) -> Profile | None:
    """The tree of a known profile; None when it, or one it derives from, is not known or makes a circle."""
    return _read(url.partition("|")[0], registry, frozenset())


def _read(url: str, registry: Registry, seen: frozenset[str]) -> Profile | None:
    definition = registry.profile(url)
    if definition is None or url in seen:
        return None
    kind = str(definition.get("type", ""))
    elements = _elements(definition, "snapshot")
    if elements:
        return Profile(url, kind, _grow(Rule(kind), elements, registry, kind))
    base = str(definition.get("baseDefinition", "")).partition("|")[0]
    if base == SD + kind:
        root = Rule(kind)
    else:
        parent = _read(base, registry, seen | {url})
        if parent is None:
            return None
        root = parent.root
    return Profile(url, kind, _grow(root, _elements(definition, "differential"), registry, kind))


def _elements(definition: Definition, view: str) -> list[Definition]:
    elements = definition.get(view, {}).get("element") if isinstance(definition.get(view), Mapping) else None
    return (
        [e for e in elements if isinstance(e, Mapping) and isinstance(e.get("path"), str)] if elements else []
    )


def _grow(root: Rule, elements: list[Definition], registry: Registry, kind: str) -> Rule:
    current: dict[str, str] = {}
    for element in elements:
        steps = _steps(element, current, registry, kind)
        rule = root
        for name, slice_name in steps:
            rule = rule.children.setdefault(name, Rule(name))
            if slice_name:
                rule = rule.slices.setdefault(slice_name, Rule(name))
        _fill(rule, element)
    return root


def _steps(
    element: Definition, current: dict[str, str], registry: Registry, kind: str
) -> list[tuple[str, str]]:
    """Name and slice of each step from the root; the id says them, or else path and sliceName in order."""
    ident = element.get("id")
    if not (isinstance(ident, str) and ident.partition(".")[0].partition(":")[0] == kind):
        path = str(element["path"])
        for known in [p for p in current if p != path and not path.startswith(p + ".")]:
            del current[known]
        if isinstance(element.get("sliceName"), str):
            current[path] = element["sliceName"]
        else:
            current.pop(path, None)
        parts = path.split(".")
        ident = parts[0]
        for depth in range(1, len(parts)):
            slice_name = current.get(".".join(parts[: depth + 1]), "")
            ident += f".{parts[depth]}" + (f":{slice_name}" if slice_name else "")
    steps: list[tuple[str, str]] = []
    owner = kind
    for part in ident.split(".")[1:]:
        name, _, slice_name = part.partition(":")
        place = registry.edition.child(owner, name)
        if place is not None and place.element.is_choice:
            # the short form `valueQuantity` stands for the slice of value[x] with that type
            name, slice_name = place.element.name, slice_name or name
            owner = place.type_name
        elif place is not None:
            owner = place.type_name
        else:
            owner = _choice_owner(owner, name, slice_name, registry)
        steps.append((name, slice_name))
    return steps


def _choice_owner(owner: str, name: str, slice_name: str, registry: Registry) -> str:
    place = registry.edition.child(owner, slice_name) if slice_name else None
    return place.type_name if place is not None and place.element.name == name else ""


def _fill(rule: Rule, element: Definition) -> None:
    if isinstance(element.get("min"), int):
        rule.min = element["min"]
    maximum = element.get("max")
    if isinstance(maximum, str):
        rule.max = int(maximum) if maximum.isdecimal() else None
    if element.get("type"):
        rule.types = tuple(
            TypeRef(str(t.get("code")), tuple(t.get("profile", ())), tuple(t.get("targetProfile", ())))
            for t in element["type"]
            if isinstance(t, Mapping)
        )
    for key, value in element.items():
        if key.startswith("fixed"):
            rule.fixed = value
        elif key.startswith("pattern"):
            rule.pattern = value
    binding = element.get("binding")
    if isinstance(binding, Mapping) and binding.get("valueSet"):
        strength = binding.get("strength")
        if strength in ("required", "extensible"):
            rule.binding = Binding(strength, str(binding["valueSet"]).partition("|")[0])
    if isinstance(element.get("maxLength"), int):
        rule.max_length = element["maxLength"]
    _fill_invariants(rule, element)
    slicing = element.get("slicing")
    if isinstance(slicing, Mapping):
        rule.slicing = Slicing(
            tuple((str(d.get("type")), str(d.get("path"))) for d in slicing.get("discriminator", ())),
            str(slicing.get("rules", "open")),
            bool(slicing.get("ordered")),
        )


def _fill_invariants(rule: Rule, element: Definition) -> None:
    held = {i.key for i in rule.invariants}
    for constraint in element.get("constraint", ()):
        if constraint.get("expression") and constraint.get("key") not in held:
            severity: Literal["error", "warning"] = (
                "warning" if constraint.get("severity") == "warning" else "error"
            )
            rule.invariants.append(
                Invariant(
                    constraint["key"], severity, constraint["expression"], str(constraint.get("human", ""))
                )
            )
