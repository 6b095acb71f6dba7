"""Good bodies with one place spoilt: refused or taken, never a failure of the service, never half kept."""

from __future__ import annotations

import json
from collections.abc import Iterator
from copy import deepcopy
from itertools import cycle
from typing import Any

import pytest
from starlette.testclient import TestClient

FHIR = {"Content-Type": "application/fhir+json"}
SPOILT = (
    None,
    7,
    "x",
    [],
    {},
    [7],
    True,
    "urn:uuid:x",
    {"a": [{}]},
    "Observation?identifier=a|b",
    [None],
    -1,
)
SDC = "http://hl7.org/fhir/uv/sdc/StructureDefinition/sdc-questionnaire-"


def places(value: Any, path: tuple[Any, ...] = ()) -> Iterator[tuple[Any, ...]]:
    """The way to every value inside."""
    for key, inner in value.items() if isinstance(value, dict) else enumerate(value):
        yield (*path, key)
        if isinstance(inner, dict | list):
            yield from places(inner, (*path, key))


def spoilt(body: dict[str, Any]) -> Iterator[dict[str, Any]]:
    """The body with each place in turn replaced, and with each member gone."""
    values = cycle(SPOILT)
    for path in places(body):
        made = deepcopy(body)
        owner: Any = made
        for step in path[:-1]:
            owner = owner[step]
        owner[path[-1]] = next(values)
        yield made
        if isinstance(owner, dict):
            gone = deepcopy(made)
            owner = gone
            for step in path[:-1]:
                owner = owner[step]
            del owner[path[-1]]
            yield gone


def told(client: TestClient, address: str, body: dict[str, Any]) -> int:
    answer = client.post(address, content=json.dumps(body), headers=FHIR)
    assert answer.status_code < 500, (body, answer.text)
    if answer.status_code >= 400:
        assert answer.json()["resourceType"] == "OperationOutcome"
        assert answer.headers["content-type"] == "application/fhir+json"
    return answer.status_code


@pytest.mark.parametrize("kind", ["transaction", "batch"])
def test_bundles(client: TestClient, coded_bundle: dict[str, Any], kind: str) -> None:
    entries = [coded_bundle["entry"][number] for number in (0, 33, 34, 35)]
    for entry, most in ((entries[1], "hasMember"), (entries[3], "target")):
        entry["resource"][most] = entry["resource"][most][:1]
    bundle = {"resourceType": "Bundle", "type": kind, "entry": entries}
    statuses = {told(client, "/fhir/r4", one) for one in spoilt(bundle)}
    assert {200, 400, 422} <= statuses


def test_operations(still: TestClient) -> None:
    coding = {"system": "https://fhirgallop.org/fhir/CodeSystem/findings", "code": "murmur", "display": "x"}
    dependency = [{"name": "element", "valueUri": "urn:x"},
                  {"name": "concept", "valueCodeableConcept": {"coding": [coding], "text": "y"}}]  # fmt: skip
    parameters = [
        {"name": "codeableConcept", "valueCodeableConcept": {"coding": [coding], "text": "x"}},
        {"name": "dependency", "part": dependency},
    ]
    body = {"resourceType": "Parameters", "parameter": parameters}
    assert told(still, "/fhir/r4/ConceptMap/$translate", body) == 200
    for one in spoilt(body):
        told(still, "/fhir/r4/ConceptMap/$translate", one)
        told(still, "/fhir/r5/ConceptMap/$translate", one)
    code = {"resourceType": "Parameters", "parameter": parameters[:1]}
    assert told(still, "/fhir/r4/ValueSet/axis-posture/$validate-code", code) == 200
    for one in spoilt(code):
        told(still, "/fhir/r4/ValueSet/axis-posture/$validate-code", one)
        told(still, "/fhir/r4/CodeSystem/$lookup", one)


def test_forms(still: TestClient) -> None:
    item = {
        "linkId": "w", "type": "decimal", "text": "Weight", "code": [{"system": "urn:s", "code": "c"}],
        "extension": [{"url": SDC + "observationExtract", "valueBoolean": True}],
    }  # fmt: skip
    form = {"resourceType": "Questionnaire", "status": "active", "item": [item]}
    response = {
        "resourceType": "QuestionnaireResponse", "id": "r", "status": "completed",
        "subject": {"reference": "Patient/1"}, "authored": "2026-03-14",
        "author": {"reference": "Practitioner/1"},
        "item": [{"linkId": "w", "answer": [{"valueDecimal": 3}]}],
    }  # fmt: skip
    body = {
        "resourceType": "Parameters",
        "parameter": [
            {"name": "questionnaire-response", "resource": response},
            {"name": "questionnaire", "resource": form},
        ],
    }
    assert told(still, "/fhir/r4/QuestionnaireResponse/$extract", body) == 200
    statuses = {told(still, "/fhir/r4/QuestionnaireResponse/$extract", one) for one in spoilt(body)}
    assert {200, 400, 422} <= statuses


def test_forms_with_templates_and_definitions(still: TestClient) -> None:
    value = {"extension": [{"url": SDC + "templateExtractValue", "valueString": "%resource.authored"}]}
    template = {
        "resourceType": "Observation", "id": "t", "status": "final", "code": {"text": "x"},
        "_effectiveDateTime": value,
        "note": [{"extension": [{"url": SDC + "templateExtractContext", "valueString": "answer"}],
                  "_text": {"extension": [{"url": SDC + "templateExtractValue", "valueString": "value"}]}}],
    }  # fmt: skip
    observation = "http://hl7.org/fhir/StructureDefinition/Observation"
    parts = [
        {"url": "template", "valueReference": {"reference": "#t"}},
        {"url": "fullUrl", "valueString": "%a"},
    ]
    fixed = [{"url": "definition", "valueUri": f"{observation}#Observation.status"},
             {"url": "fixed-value", "valueCode": "final"}]  # fmt: skip
    computed = [{"url": "definition", "valueUri": f"{observation}#Observation.code.text"},
                {"url": "expression", "valueExpression": {"expression": "'x'"}}]  # fmt: skip
    form = {
        "resourceType": "Questionnaire", "status": "active", "contained": [template],
        "extension": [
            {"url": SDC + "extractAllocateId", "valueString": "a"},
            {"url": SDC + "definitionExtract",
             "extension": [{"url": "definition", "valueCanonical": observation}]},
            {"url": SDC + "definitionExtractValue", "extension": fixed},
            {"url": SDC + "definitionExtractValue", "extension": computed},
        ],
        "item": [{"linkId": "n", "type": "string", "definition": f"{observation}#Observation.value[x]",
                  "extension": [{"url": SDC + "templateExtract", "extension": parts}]}],
    }  # fmt: skip
    response = {
        "resourceType": "QuestionnaireResponse", "id": "r", "status": "completed",
        "subject": {"reference": "Patient/1"}, "authored": "2026-03-14",
        "item": [{"linkId": "n", "answer": [{"valueString": "soft"}]}],
    }  # fmt: skip
    body = {
        "resourceType": "Parameters",
        "parameter": [
            {"name": "questionnaire-response", "resource": response},
            {"name": "questionnaire", "resource": form},
        ],
    }
    assert told(still, "/fhir/r4/QuestionnaireResponse/$extract", body) == 200
    statuses = {told(still, "/fhir/r4/QuestionnaireResponse/$extract", one) for one in spoilt(body)}
    assert {200, 400, 422} <= statuses


def test_questions_to_the_judge(still: TestClient, observation: dict[str, Any]) -> None:
    parameters = [
        {
            "name": "resource",
            "resource": {"resourceType": "Observation", "status": "final", "code": {"text": "x"}},
        },
        {"name": "mode", "valueCode": "create"},
        {"name": "profile", "valueUri": "https://fhirgallop.org/fhir/StructureDefinition/exam-finding"},
    ]
    body = {"resourceType": "Parameters", "parameter": parameters}
    for one in spoilt(body):
        told(still, "/fhir/r4/Observation/$validate", one)
    for one in spoilt(observation):
        told(still, "/fhir/r4/$validate", one)
