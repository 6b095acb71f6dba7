"""Definition-based extraction (SD-9): elements filled by id, values fixed and computed, profiles, requests.

Source: HL7 SDC 4.0.0, definition-based extraction and its extensions. Forms and answers are invented.
"""

from __future__ import annotations

from typing import Any

import pytest
from starlette.testclient import TestClient

from fhirgallop.conformance.validator import validate
from fhirgallop.outcome import has_errors

FHIR = {"Content-Type": "application/fhir+json"}
SDC = "http://hl7.org/fhir/uv/sdc/StructureDefinition/sdc-questionnaire-"
SD = "http://hl7.org/fhir/StructureDefinition/"
OBSERVATION, WEIGHT, PATIENT = SD + "Observation", SD + "bodyweight", SD + "Patient"
OF = f"{OBSERVATION}#"
MISFIT = "sdc-definition-misfit"


def starts(canonical: str, **parts: str) -> dict[str, Any]:
    inner: list[dict[str, Any]] = [{"url": "definition", "valueCanonical": canonical}]
    inner += [{"url": name, "valueString": text} for name, text in parts.items()]
    return {"url": SDC + "definitionExtract", "extension": inner}


def gives(definition: str, expression: str = "", **fixed: Any) -> dict[str, Any]:
    inner: list[dict[str, Any]] = [{"url": "definition", "valueUri": definition}]
    inner += [{"url": "fixed-value", key: value} for key, value in fixed.items()]
    if expression:
        spoken = {"language": "text/fhirpath", "expression": expression}
        inner.append({"url": "expression", "valueExpression": spoken})
    return {"url": SDC + "definitionExtractValue", "extension": inner}


def item(link: str, kind: str, definition: str = "", *extension: Any, **more: Any) -> dict[str, Any]:
    made = {"linkId": link, "type": kind, **more}
    if definition:
        made["definition"] = definition
    return {**made, "extension": list(extension)} if extension else made


def form(*items: dict[str, Any], extension: list[Any] | None = None) -> dict[str, Any]:
    made: dict[str, Any] = {"resourceType": "Questionnaire", "status": "active", "item": list(items)}
    return {**made, "extension": extension} if extension else made


def response(*items: dict[str, Any]) -> dict[str, Any]:
    return {
        "resourceType": "QuestionnaireResponse", "id": "qr-1", "status": "completed",
        "subject": {"reference": "Patient/p-1"}, "authored": "2026-03-14T09:30:00+01:00", "item": list(items),
    }  # fmt: skip


def said(link: str, *answers: Any, item: list[Any] | None = None) -> dict[str, Any]:
    made: dict[str, Any] = {"linkId": link}
    if answers:
        made["answer"] = list(answers)
    return {**made, "item": item} if item else made


KG = {"url": SD + "questionnaire-unit",
      "valueCoding": {"system": "http://unitsofmeasure.org", "code": "kg", "display": "kg"}}  # fmt: skip


def common(canonical: str) -> list[dict[str, Any]]:
    return [
        gives(f"{canonical}#Observation.status", valueCode="final"),
        gives(f"{canonical}#Observation.subject", "%resource.subject"),
        gives(f"{canonical}#Observation.effective[x]", "%resource.authored"),
    ]


def call(client: TestClient, answers: Any, questions: Any, edition: str = "r4") -> Any:
    body = {
        "resourceType": "Parameters",
        "parameter": [
            {"name": "questionnaire-response", "resource": answers},
            {"name": "questionnaire", "resource": questions},
        ],
    }
    return client.post(f"/fhir/{edition}/QuestionnaireResponse/$extract", json=body, headers=FHIR)


def entries(client: TestClient, answers: Any, questions: Any) -> list[dict[str, Any]]:
    answer = call(client, answers, questions)
    assert answer.status_code == 200, answer.text
    parts = {part["name"]: part["resource"] for part in answer.json()["parameter"]}
    assert not has_errors(validate(parts["return"]))
    found: list[dict[str, Any]] = parts["return"]["entry"]
    return found[:-1]


def rules(answer: Any) -> set[str]:
    assert answer.status_code == 422, answer.text
    return {
        issue["details"]["coding"][0]["code"]
        for issue in answer.json()["issue"]
        if issue["severity"] == "error"
    }


def test_a_profile_gives_what_it_fixes(still: TestClient) -> None:
    questions = form(
        item("w", "decimal", f"{WEIGHT}#Observation.value[x]", KG),
        extension=[starts(WEIGHT), *common(WEIGHT)],
    )
    (entry,) = entries(still, response(said("w", {"valueDecimal": 81.5})), questions)
    assert entry["request"] == {"method": "POST", "url": "Observation"}
    category = "http://terminology.hl7.org/CodeSystem/observation-category"
    assert entry["resource"] == {
        "resourceType": "Observation",
        "meta": {"profile": [WEIGHT]},
        "status": "final",
        "category": [{"coding": [{"system": category, "code": "vital-signs"}]}],
        "code": {"coding": [{"system": "http://loinc.org", "code": "29463-7"}]},
        "subject": {"reference": "Patient/p-1"},
        "effectiveDateTime": "2026-03-14T09:30:00+01:00",
        "valueQuantity": {"value": 81.5, "unit": "kg", "system": "http://unitsofmeasure.org", "code": "kg"},
    }


def test_what_is_said_already_is_not_said_twice(still: TestClient) -> None:
    coding = {"system": "http://loinc.org", "code": "29463-7", "display": "Body weight"}
    questions = form(
        item("w", "decimal", f"{WEIGHT}#Observation.value[x]", KG),
        item("c", "choice", f"{WEIGHT}#Observation.code"),
        extension=[starts(WEIGHT), *common(WEIGHT)],
    )
    answers = response(said("w", {"valueDecimal": 81.5}), said("c", {"valueCoding": coding}))
    (entry,) = entries(still, answers, questions)
    assert entry["resource"]["code"] == {"coding": [coding]}


@pytest.mark.parametrize(
    ("answer", "key", "value"),
    [
        ({"valueCoding": {"code": "x"}}, "valueCodeableConcept", {"coding": [{"code": "x"}]}),
        ({"valueString": "soft"}, "valueString", "soft"),
        ({"valueBoolean": False}, "valueBoolean", False),
        ({"valueInteger": 3}, "valueInteger", 3),
        ({"valueDecimal": 3.5}, "valueQuantity", {"value": 3.5}),
        ({"valueDate": "2026-03-14"}, "valueDateTime", "2026-03-14"),
        ({"valueTime": "09:30:00"}, "valueTime", "09:30:00"),
        ({"valueQuantity": {"value": 3, "unit": "m"}}, "valueQuantity", {"value": 3, "unit": "m"}),
        ({"valueUri": "https://a.example"}, "valueString", "https://a.example"),
    ],
)
def test_values_take_the_type_that_the_element_has(
    still: TestClient, answer: Any, key: str, value: Any
) -> None:
    questions = form(
        item("a", "string", f"{OBSERVATION}#Observation.value[x]"),
        extension=[starts(OBSERVATION), *common(OBSERVATION),
                   gives(f"{OBSERVATION}#Observation.code.text", valueString="Sound")],
    )  # fmt: skip
    (entry,) = entries(still, response(said("a", answer)), questions)
    assert entry["resource"][key] == value
    assert entry["resource"]["code"] == {"text": "Sound"}
    assert "meta" not in entry["resource"]


def test_groups_open_elements_and_resources(still: TestClient) -> None:
    """A group with a definition is an element each time; one with definitionExtract a resource each time."""
    component = f"{OBSERVATION}#Observation.component"
    part = item(
        "part", "group", component, repeats=True,
        item=[item("name", "string", f"{component}.code.text"),
              item("val", "string", f"{component}.value[x]")],
    )  # fmt: skip
    whole = item(
        "whole", "group", "", starts(OBSERVATION), *common(OBSERVATION), repeats=True,
        item=[item("code", "string", f"{OBSERVATION}#Observation.code"), part],
    )  # fmt: skip

    def told(code: str, *pairs: tuple[str, str]) -> dict[str, Any]:
        parts = [
            said("part", item=[said("name", {"valueString": name}), said("val", {"valueString": value})])
            for name, value in pairs
        ]
        return said("whole", item=[said("code", {"valueString": code}), *parts])

    answers = response(told("A", ("a", "1"), ("b", "2")), told("B", ("c", "3")))
    first, second = (entry["resource"] for entry in entries(still, answers, form(whole)))
    assert first["code"] == {"text": "A"}
    assert first["component"] == [
        {"code": {"text": "a"}, "valueString": "1"},
        {"code": {"text": "b"}, "valueString": "2"},
    ]
    assert second["component"] == [{"code": {"text": "c"}, "valueString": "3"}]


def test_siblings_without_a_group_fill_one_element(still: TestClient) -> None:
    questions = form(
        item("g", "string", f"{PATIENT}#Patient.name.given"),
        item("f", "string", f"{PATIENT}#Patient.name.family"),
        item("s", "choice", f"{PATIENT}#Patient.gender"),
        extension=[starts(PATIENT)],
    )
    answers = response(
        said("g", {"valueString": "Ada"}, {"valueString": "B."}),
        said("f", {"valueString": "Example"}),
        said("s", {"valueCoding": {"code": "female"}}),
    )
    (entry,) = entries(still, answers, questions)
    assert entry["resource"] == {
        "resourceType": "Patient",
        "name": [{"given": ["Ada", "B."], "family": "Example"}],
        "gender": "female",
    }


def test_an_id_makes_an_update_and_ids_tie_resources(still: TestClient) -> None:
    questions = form(
        extension=[
            {"url": SDC + "extractAllocateId", "valueString": "who"},
            starts(PATIENT, fullUrl="%who", ifNoneExist="'identifier=7'"),
            gives(f"{PATIENT}#Patient.active", valueBoolean=True),
            starts(OBSERVATION, ifMatch="'W/\"2\"'"),
            gives(f"{OBSERVATION}#Observation.id", "'obs-' + %resource.id"),
            gives(f"{OBSERVATION}#Observation.status", valueCode="final"),
            gives(f"{OBSERVATION}#Observation.code.text", valueString="Sound"),
            gives(f"{OBSERVATION}#Observation.subject.reference", "%who"),
        ]
    )
    patient, observation = entries(still, response(), questions)
    assert patient["fullUrl"].startswith("urn:uuid:")
    assert patient["request"] == {"method": "POST", "url": "Patient", "ifNoneExist": "identifier=7"}
    assert observation["resource"]["subject"] == {"reference": patient["fullUrl"]}
    assert observation["request"] == {
        "method": "PUT", "url": "Observation/obs-qr-1", "ifMatch": 'W/"2"',
    }  # fmt: skip


@pytest.mark.parametrize(
    ("extension", "rule"),
    [
        ([starts("https://a.example/none")], "sdc-definition-unknown"),
        ([starts(OBSERVATION), gives(f"{OF}Observation.nonsense", valueCode="x")], MISFIT),
        ([starts(OBSERVATION), gives(f"{OF}Observation.status", valueBoolean=True)], MISFIT),
        ([starts(OBSERVATION), gives(f"{OF}Patient.active", valueBoolean=True)], MISFIT),
        ([starts(OBSERVATION), gives(f"{OF}Observation.status.x", valueCode="x")], MISFIT),
        ([starts(OBSERVATION), *common(OBSERVATION), *common(OBSERVATION)], MISFIT),
        ([starts(OBSERVATION), gives(f"{OF}Observation.status", "%nobody")], "sdc-expression"),
        ([starts(OBSERVATION), gives(f"{OF}Observation.status", "((")], "sdc-expression"),
        ([starts(OBSERVATION), gives(f"{OF}{'Observation.' * 9000}", valueCode="x")],
         MISFIT),
    ],
)  # fmt: skip
def test_what_does_not_fit_is_told(still: TestClient, extension: list[Any], rule: str) -> None:
    assert rule in rules(call(still, response(), form(extension=extension)))


def test_a_definition_that_starts_nothing_is_named(still: TestClient) -> None:
    questions = form(
        item("a", "string", f"{PATIENT}#Patient.language"),
        extension=[starts(OBSERVATION), *common(OBSERVATION),
                   gives(f"{OBSERVATION}#Observation.code.text", valueString="Sound")],
    )  # fmt: skip
    answer = call(still, response(said("a", {"valueString": "de"})), questions)
    issues = next(part["resource"] for part in answer.json()["parameter"] if part["name"] == "issues")
    found = {issue["details"]["coding"][0]["code"]: issue["severity"] for issue in issues["issue"]}
    assert found["sdc-definition-not-started"] == "warning"


def test_an_incomplete_resource_is_not_given_out(still: TestClient) -> None:
    answer = call(still, response(), form(extension=[starts(WEIGHT), *common(WEIGHT)[:1]]))
    assert answer.status_code == 422
