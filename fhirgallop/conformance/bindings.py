"""Clause: coded values and the value sets they are bound to; the code system matters.

Required: an error. Extensible: a warning. A value set that is not at hand: a warning that says so.
Source: FHIR "Terminologies", binding strengths (R4, R4B, R5).
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any

from fhirgallop.conformance.editions import Edition
from fhirgallop.conformance.editions.model import Binding
from fhirgallop.conformance.grammars import judge
from fhirgallop.conformance.node import Node
from fhirgallop.conformance.registry import Registry
from fhirgallop.conformance.wording import canonical
from fhirgallop.outcome import Issue

CODED = frozenset(
    {
        "code",
        "string",
        "uri",
        "url",
        "canonical",
        "id",
        "Coding",
        "CodeableConcept",
        "CodeableReference",
        "Quantity",
    }
)
_SYSTEMLESS = frozenset({"code", "string", "uri", "url", "canonical", "id"})


def check(node: Node, registry: Registry) -> Iterator[Issue]:
    """Issues of one node by the binding of its element."""
    if node.element is not None and node.element.binding is not None:
        yield from check_binding(node, node.element.binding, registry)


def check_binding(node: Node, binding: Binding, registry: Registry) -> Iterator[Issue]:
    """Issues of one node by a binding, its own or a profile's."""
    codes = _codes(node, registry.edition)
    if codes is None:
        return
    if binding.maximum and codes:
        yield from _judge(node, binding.maximum, codes, registry, strength="maximum")
    if binding.strength == "required" or (binding.strength == "extensible" and codes):
        yield from _judge(node, binding.value_set, codes, registry, binding.strength)


def _judge(
    node: Node, url: str, codes: list[tuple[str | None, str]], registry: Registry, strength: str
) -> Iterator[Issue]:
    verdict = among(url, codes, registry)
    if verdict:
        return
    at = node.expression
    if verdict is None:
        said = f"The value set {canonical(url)} is not loaded or not enumerable, so this code was not judged."
        yield Issue("warning", "not-supported", "binding-not-judged", said, expression=at)
        return
    cure = "Take a code of that value set, with its code system."
    if not codes:
        said = f"A code of the value set {canonical(url)} is required here, and there is none. {cure}"
        yield Issue("error", "code-invalid", "binding-required", said, expression=at)
    elif strength == "extensible":
        said = f"None of the codes is in the value set {canonical(url)}. {cure}, if one fits.".replace(
            "system.,", "system,"
        )
        yield Issue("warning", "code-invalid", "binding-extensible", said, expression=at)
    else:
        said = f"The code is not in the value set {canonical(url)}, which is binding here. {cure}"
        yield Issue("error", "code-invalid", f"binding-{strength}", said, expression=at)


def among(url: str, codes: list[tuple[str | None, str]], registry: Registry) -> bool | None:
    """Whether any of the codes (system, code) is in the value set; None when that cannot be said."""
    value_set = registry.value_set(url)
    if value_set is None:
        return None
    verdict: bool | None = False
    for system, code in codes:
        found = value_set.has(system, code)
        if found is None:
            found = judge(value_set.open_systems if system is None else (system,), code)
        if found:
            return True
        if found is None:
            verdict = None
    return verdict


def _codes(node: Node, edition: Edition) -> list[tuple[str | None, str]] | None:
    """System and code of what the node says; None when there is nothing to judge."""
    value = node.value
    for kind in edition.ancestors(node.type_name):
        if kind in _SYSTEMLESS:
            return [(None, value)] if isinstance(value, str) and value else None
        if kind == "CodeableReference":
            value = value.get("concept")
            return _concept(value) if isinstance(value, Mapping) else None
        if kind == "CodeableConcept":
            return _concept(value)
        if kind in ("Coding", "Quantity"):
            if "code" not in value and "extension" in value and len(value) == 1:
                return None
            return _coding(value)
    return None


def _concept(value: Mapping[Any, Any]) -> list[tuple[str | None, str]] | None:
    codings = value.get("coding")
    if codings is None and "text" not in value:
        return None
    found: list[tuple[str | None, str]] = []
    for coding in codings if isinstance(codings, list) else []:
        if isinstance(coding, Mapping):
            found.extend(_coding(coding))
    return found


def _coding(value: Mapping[Any, Any]) -> list[tuple[str | None, str]]:
    """A Coding or Quantity without a system names no code: '' stands for the missing system."""
    code, system = value.get("code"), value.get("system")
    if not isinstance(code, str):
        return []
    return [(system if isinstance(system, str) else "", code)]
