"""QuestionnaireResponse/$extract over HTTP (SD-1 to SD-3, SD-12, SD-13, SD-15).

What is extracted from which answer is tried in tests/observations; here it is what the operation makes of it.
"""

from __future__ import annotations

from copy import deepcopy
from typing import Any

import pytest
from starlette.testclient import TestClient

from fhirgallop.conformance.validator import validate
from fhirgallop.outcome import has_errors

FHIR = {"Content-Type": "application/fhir+json"}
SDC = "http://hl7.org/fhir/uv/sdc/StructureDefinition/sdc-questionnaire-"
EDITIONS = {"r4": "R4", "r4b": "R4B", "r5": "R5"}


@pytest.fixture
def form() -> dict[str, Any]:
    loinc = {"system": "http://loinc.org", "code": "29463-7", "display": "Body weight"}
    kilogram = {"system": "http://unitsofmeasure.org", "code": "kg", "display": "kg"}
    unit = {
        "url": "http://hl7.org/fhir/StructureDefinition/questionnaire-unit",
        "valueCoding": kilogram,
    }
    category = {
        "coding": [
            {"system": "http://terminology.hl7.org/CodeSystem/observation-category", "code": "vital-signs"}
        ]
    }
    return {
        "resourceType": "Questionnaire",
        "status": "active",
        "extension": [
            {"url": SDC + "observationExtract", "valueBoolean": True},
            {"url": SDC + "observation-extract-category", "valueCodeableConcept": category},
        ],
        "item": [
            {"linkId": "weight", "type": "decimal", "text": "Weight", "code": [loinc], "extension": [unit]},
            {"linkId": "words", "type": "string", "text": "Remarks"},
        ],
    }


@pytest.fixture
def response() -> dict[str, Any]:
    return {
        "resourceType": "QuestionnaireResponse",
        "id": "qr-1",
        "questionnaire": "https://a.example/weight",
        "status": "completed",
        "subject": {"reference": "Patient/p-1"},
        "authored": "2026-03-14T09:30:00+01:00",
        "author": {"reference": "Practitioner/7"},
        "item": [{"linkId": "weight", "answer": [{"valueDecimal": 81.5}]}],
    }


def call(client: TestClient, edition: str, **given: Any) -> Any:
    parameters = [{"name": name.replace("_", "-"), "resource": one} for name, one in given.items()]
    body = {"resourceType": "Parameters", "parameter": parameters}
    return client.post(f"/fhir/{edition}/QuestionnaireResponse/$extract", json=body, headers=FHIR)


def parts(answer: Any, edition: str = "r4") -> dict[str, Any]:
    assert answer.status_code == 200, answer.text
    assert not has_errors(validate(answer.content, EDITIONS[edition]))
    return {part["name"]: part["resource"] for part in answer.json()["parameter"]}


@pytest.mark.parametrize("edition", EDITIONS)
def test_answers_come_as_a_transaction(
    still: TestClient, form: dict[str, Any], response: dict[str, Any], edition: str
) -> None:
    bundle = parts(call(still, edition, questionnaire_response=response, questionnaire=form), edition)[
        "return"
    ]
    assert bundle["type"] == "transaction"
    observation, trail = (entry["resource"] for entry in bundle["entry"])
    assert observation["valueQuantity"]["value"] == 81.5
    assert observation["status"] == "final"
    assert observation["subject"] == {"reference": "Patient/p-1"}
    # SD-13: where it comes from
    assert trail["resourceType"] == "Provenance"
    assert trail["entity"] == [{"role": "source", "what": {"reference": "QuestionnaireResponse/qr-1"}}]
    assert trail["target"] == [{"reference": bundle["entry"][0]["fullUrl"]}]
    assert trail["agent"][0]["who"] == {"reference": "Practitioner/7"}


def test_it_stores_nothing_and_can_be_stored(
    client: TestClient, form: dict[str, Any], response: dict[str, Any]
) -> None:
    bundle = parts(call(client, "r4", questionnaire_response=response, questionnaire=form))["return"]
    assert "entry" not in client.get("/fhir/r4/Observation").json()
    for status in ("201 Created", "200 OK"):
        told = client.post("/fhir/r4", json=bundle, headers=FHIR).json()
        assert {entry["response"]["status"] for entry in told["entry"]} == {status}
    (found,) = client.get("/fhir/r4/Observation", params={"patient": "p-1"}).json()["entry"]
    assert found["resource"]["code"]["coding"][0]["code"] == "29463-7"


def test_a_response_may_bring_its_form(
    still: TestClient, form: dict[str, Any], response: dict[str, Any]
) -> None:
    whole = {**response, "questionnaire": "#form", "contained": [{**form, "id": "form"}]}
    body = still.post("/fhir/r4/QuestionnaireResponse/$extract", json=whole, headers=FHIR)
    assert "return" in parts(body)


def test_nothing_to_extract_is_no_error(
    still: TestClient, form: dict[str, Any], response: dict[str, Any]
) -> None:
    empty = {**response, "item": [{"linkId": "words", "answer": [{"valueString": "well"}]}]}
    found = parts(call(still, "r4", questionnaire_response=empty, questionnaire=form))
    assert "return" not in found
    severities = [issue["severity"] for issue in found["issues"]["issue"]]
    assert set(severities) <= {"information", "warning"}
    assert severities


@pytest.mark.parametrize(
    ("change", "status", "rule"),
    [
        ({"status": "in-progress"}, 422, "sdc-not-completed"),
        ({"modifierExtension": [{"url": "https://a.example/m", "valueBoolean": True}]}, 422, "sdc-modifier"),
        ({"item": [{"linkId": "strange", "answer": [{"valueDecimal": 1}]}]}, 422, "form-unknown-link"),
        ({"subject": None}, 422, "sdc-no-subject"),
        ({"resourceType": "Patient"}, 422, "sdc-not-a-response"),
    ],
)
def test_responses_that_are_refused(
    still: TestClient,
    form: dict[str, Any],
    response: dict[str, Any],
    change: dict[str, Any],
    status: int,
    rule: str,
) -> None:
    sent = {key: value for key, value in {**response, **change}.items() if value is not None}
    answer = call(still, "r4", questionnaire_response=sent, questionnaire=form)
    assert answer.status_code == status
    rules = [issue["details"]["coding"][0]["code"] for issue in answer.json()["issue"]]
    assert rule in rules


def test_what_would_not_conform_is_not_given_out(
    still: TestClient, form: dict[str, Any], response: dict[str, Any]
) -> None:
    """SD-15: a weight in litres breaks the vital-signs profile."""
    broken = deepcopy(form)
    broken["item"][0]["extension"][0]["valueCoding"] = {"system": "http://unitsofmeasure.org", "code": "L"}
    answer = call(still, "r4", questionnaire_response=response, questionnaire=broken)
    assert answer.status_code == 422
    assert answer.json()["resourceType"] == "OperationOutcome"


def test_calls_that_lack_something(still: TestClient, form: dict[str, Any], response: dict[str, Any]) -> None:
    assert call(still, "r4", questionnaire=form).status_code == 400
    assert call(still, "r4", questionnaire_response=response).status_code == 422
    assert call(still, "r4", questionnaire_response=response, strange=form).status_code == 400
    instance = still.post("/fhir/r4/QuestionnaireResponse/qr-1/$extract", json={}, headers=FHIR)
    assert instance.status_code in (404, 405)
