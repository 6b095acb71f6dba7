"""Codes that nobody can judge here, because no release of their system is loaded: said, not passed over.

Source: FHIR R4 terminology-service.html; the judge itself knows the code systems of the base definitions and
our own.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any, Final

from fhirgallop.codes import systems
from fhirgallop.outcome import Issue

_NAMES: Final = {systems.SNOMED: "SNOMED CT", systems.LOINC: "LOINC", systems.HPO: "HPO"}
_DEEPEST: Final = 64


def unjudged(resource: Mapping[str, Any]) -> list[Issue]:
    """One issue for each system whose codes stand in the resource and were not looked up.

    A warning where a coding names a version: it may be one that a terminology server knows.
    """
    with_version: set[str] = set()
    found: set[str] = set()
    for coding in _codings(resource, 0):
        name = _NAMES.get(str(coding["system"]))
        if name:
            found.add(name)
            if "version" in coding:
                with_version.add(name)
    type_ = str(resource.get("resourceType"))
    return [_issue(name, type_, named=name in with_version) for name in sorted(found)]


def _issue(name: str, type_: str, *, named: bool) -> Issue:
    if named:
        text = f"The version of {name} that is named is not loaded here; its codes were not judged."
        return Issue("warning", "not-found", "code-system-version", text, type_)
    text = f"No release of {name} is loaded here; that its codes exist was not judged."
    return Issue("information", "incomplete", "code-system-not-loaded", text, type_)


def _codings(held: Any, depth: int) -> Iterator[Mapping[str, Any]]:
    if depth > _DEEPEST:
        return
    if isinstance(held, Mapping):
        if isinstance(held.get("system"), str) and isinstance(held.get("code"), str):
            yield held
        for inner in held.values():
            yield from _codings(inner, depth + 1)
    elif isinstance(held, list):
        for inner in held:
            yield from _codings(inner, depth + 1)
