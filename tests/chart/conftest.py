"""Charts from a short form, and facts as lines that can be compared."""

from __future__ import annotations

from collections.abc import Callable
from datetime import datetime
from decimal import Decimal
from types import SimpleNamespace
from typing import Any

import pytest

from fhirgallop.chart.read import Chart, read_chart
from fhirgallop.exam.context import Fact
from fhirgallop.exam.exam import Exam, Party
from fhirgallop.exam.moment import Moment

NOW = datetime.fromisoformat("2026-11-30T10:30:00+01:00")
EXAM = Exam(
    Party("F-1", "https://clinic.example/patients"),
    "X-1",
    "https://clinic.example/exams",
    Moment("2026-11-30T10:00:00+01:00"),
    (),
    encounter=Party("V-1", "https://clinic.example/visits"),
)
SYSTEMS = {
    "sct": "http://snomed.info/sct",
    "loinc": "http://loinc.org",
    "hpo": "http://human-phenotype-ontology.org",
    "own": "https://fhirgallop.org/fhir/CodeSystem/findings",
    "q": "https://fhirgallop.org/fhir/CodeSystem/qualifiers",
    "cat": "http://terminology.hl7.org/CodeSystem/observation-category",
    "site": "https://clinic.example/codes",
    "act": "http://terminology.hl7.org/CodeSystem/v3-ActCode",
    "int": "http://terminology.hl7.org/CodeSystem/v3-ObservationInterpretation",
    "dar": "http://terminology.hl7.org/CodeSystem/data-absent-reason",
    "ver": "http://terminology.hl7.org/CodeSystem/condition-ver-status",
    "clin": "http://terminology.hl7.org/CodeSystem/condition-clinical",
}
CONCEPTS = {
    "code", "valueCodeableConcept", "valueCode", "method", "bodySite", "severity", "clinicalStatus",
    "verificationStatus", "dataAbsentReason",
}  # fmt: skip
CONCEPT_LISTS = {"category", "interpretation", "conclusionCode"}
PATIENT = {
    "resourceType": "Patient",
    "id": "p1",
    "identifier": [{"system": "https://clinic.example/patients", "value": "F-1"}],
    "birthDate": "1960-01-15",
    "gender": "female",
}
ENCOUNTER = {
    "resourceType": "Encounter",
    "id": "e1",
    "identifier": [{"system": "https://clinic.example/visits", "value": "V-1"}],
    "subject": {"reference": "Patient/p1"},
}


def concept(text: str) -> dict[str, Any]:
    """`sct:49436004 loinc:8884-9` as a CodeableConcept."""
    coded = [part.partition(":") for part in text.split()]
    return {"coding": [{"system": SYSTEMS[system], "code": code} for system, _, code in coded]}


def expand(value: Any, key: str = "") -> Any:
    """The short form as FHIR."""
    if isinstance(value, str):
        if key in CONCEPTS and ":" in value:
            return concept(value)
        if key in CONCEPT_LISTS:
            return [concept(value)]
        if key == "valueQuantity":
            number, _, unit = value.partition(" ")
            comparator = number[0] if number[0] in "<>" else ""
            quantity: dict[str, Any] = {"value": Decimal(number.lstrip("<>"))}
            if comparator:
                quantity["comparator"] = comparator
            if unit:
                quantity |= {"unit": unit, "system": "http://unitsofmeasure.org", "code": unit}
            return quantity
        if key in ("subject", "patient", "encounter", "device"):
            return {"reference": value}
    if isinstance(value, dict):
        return {k: expand(v, k) for k, v in value.items()}
    if isinstance(value, list):
        return [expand(v, key) for v in value]
    return value


def resource(short: dict[str, Any]) -> dict[str, Any]:
    """One resource: the type from `is`, the patient and a final status where nothing else is said."""
    rest = dict(short)
    kind = rest.pop("is", "Observation")
    made = {"resourceType": kind, **expand(rest)}
    if kind not in ("Patient", "DeviceAssociation"):
        made.setdefault(
            "patient" if kind in ("Device", "DeviceUsage") else "subject", {"reference": "Patient/p1"}
        )
    if kind in ("Observation", "DiagnosticReport"):
        made.setdefault("status", "final")
    return {name: value for name, value in made.items() if value is not None}


def line(fact: Fact) -> str:
    """A fact as one line, the demographics apart."""
    parts = [fact.id, fact.state.value, fact.source.value, *fact.answers]
    if fact.measure is not None:
        m = fact.measure
        parts.append(f"{m.comparator}{m.value}{f'..{m.high}' if m.high is not None else ''} {m.unit}")
    parts += [f"{q.axis}={q.value or q.grade or q.text}" for q in fact.qualifiers]
    if fact.low_trust:
        parts.append("low-trust")
    if fact.time:
        parts.append(f"@{fact.time}")
    if fact.encounter:
        parts.append(f"#{fact.encounter}")
    return " ".join(parts)


def bundle(resources: list[dict[str, Any]]) -> dict[str, Any]:
    """A collection of resources without addresses."""
    return {"resourceType": "Bundle", "type": "collection", "entry": [{"resource": r} for r in resources]}


@pytest.fixture(scope="session")
def chart_of() -> Callable[..., Chart]:
    """Reads short forms beside the patient and the encounter."""

    def made(short: list[dict[str, Any]], **keywords: Any) -> Chart:
        resources = [PATIENT, ENCOUNTER, *(resource(one) for one in short)]
        return read_chart(bundle(resources), EXAM, NOW, **keywords)

    return made


@pytest.fixture(scope="session")
def short() -> SimpleNamespace:
    """What the short forms are made of: `resource`, `patient`, `exam`, `now`."""
    return SimpleNamespace(resource=resource, patient=PATIENT, exam=EXAM, now=NOW)


@pytest.fixture(scope="session")
def lines() -> Callable[[Chart], list[str]]:
    """The facts of a chart as lines, without age and sex."""
    return lambda chart: [line(f) for f in chart.context.facts if f.source.value != "demographics"]


@pytest.fixture(scope="session")
def rules_of() -> Callable[[Chart], set[str]]:
    """The rules of a chart's issues."""
    return lambda chart: {issue.rule for issue in chart.issues}
