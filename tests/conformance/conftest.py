"""A valid Observation to change, and the judgement of it."""

from __future__ import annotations

from collections.abc import Callable
from copy import deepcopy
from typing import Any

import pytest

from fhirgallop.conformance.registry import Registry, registry
from fhirgallop.conformance.source import read
from fhirgallop.conformance.validator import thorough, validate
from fhirgallop.outcome import Issue

OBSERVATION = {
    "resourceType": "Observation",
    "id": "s3",
    "meta": {"versionId": "1", "lastUpdated": "2026-03-04T10:00:00Z"},
    "text": {
        "status": "generated",
        "div": '<div xmlns="http://www.w3.org/1999/xhtml"><p>Third heart sound: present</p></div>',
    },
    "identifier": [{"system": "https://clinic.example/exam", "value": "e1-s3"}],
    "status": "final",
    "category": [
        {"coding": [{"system": "http://terminology.hl7.org/CodeSystem/observation-category", "code": "exam"}]}
    ],
    "code": {
        "coding": [{"system": "http://snomed.info/sct", "code": "277455002"}],
        "text": "Third heart sound",
    },
    "subject": {"reference": "Patient/p1"},
    "effectiveDateTime": "2026-03-04T09:50:00+01:00",
    "performer": [{"reference": "Practitioner/d1", "display": "Examiner"}],
    "valueCodeableConcept": {"coding": [{"system": "http://snomed.info/sct", "code": "52101004"}]},
}


@pytest.fixture
def observation() -> dict[str, Any]:
    """A valid Observation, free to be changed."""
    return deepcopy(OBSERVATION)


@pytest.fixture(scope="session")
def known() -> Callable[[str], Registry]:
    """The definitions of an edition."""
    return registry


@pytest.fixture
def judged() -> Callable[..., list[tuple[str, str, str]]]:
    """Severity, rule and expression of every issue; both passes must agree on them."""

    def run(resource: Any, edition: str = "R4", **options: Any) -> list[tuple[str, str, str]]:
        issues = validate(resource, edition, **options)
        if not options:
            slow: list[Issue] = thorough(read(resource), registry(edition))
            assert issues == slow
        return [(i.severity, i.rule, i.expression) for i in issues]

    return run


@pytest.fixture
def errors(judged: Callable[..., list[tuple[str, str, str]]]) -> Callable[..., list[tuple[str, str]]]:
    """Rule and expression of every error."""

    def run(resource: Any, edition: str = "R4", **options: Any) -> list[tuple[str, str]]:
        return [
            (r, e)
            for severity, r, e in judged(resource, edition, **options)
            if severity in ("error", "fatal")
        ]

    return run
