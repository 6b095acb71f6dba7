"""Template-based extraction (SD-10): contexts, values, ids, removal, copies, errors.

Source: HL7 SDC 4.0.0, template-based extraction and its extensions. Forms and answers are invented.
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


def value(expression: str) -> dict[str, Any]:
    return {"extension": [{"url": SDC + "templateExtractValue", "valueString": expression}]}


def context(expression: str) -> dict[str, Any]:
    return {"url": SDC + "templateExtractContext", "valueString": expression}


def extract(template: str, **parts: str) -> dict[str, Any]:
    inner = [{"url": "template", "valueReference": {"reference": f"#{template}"}}]
    inner += [{"url": name, "valueString": text} for name, text in parts.items()]
    return {"url": SDC + "templateExtract", "extension": inner}


@pytest.fixture
def template() -> dict[str, Any]:
    """An Observation that says that something could not be examined, or what was heard."""
    return {
        "resourceType": "Observation",
        "id": "sound",
        "status": "final",
        "code": {
            "coding": [{"system": "https://a.example/codes", "code": "s4"}],
            "text": "Fourth heart sound",
        },
        "subject": {"_reference": value("%resource.subject.reference")},
        "_effectiveDateTime": value("%resource.authored"),
        "valueCodeableConcept": {
            "extension": [context("item.where(linkId='heard').answer.value.ofType(Coding)")],
            "coding": [value("$this")],
        },
        "dataAbsentReason": {
            "extension": [context("item.where(linkId='why').answer")],
            "_text": value("value.ofType(string)"),
        },
        "note": [
            {
                "extension": [context("item.where(linkId='note').answer")],
                "_text": value("value.ofType(string)"),
            }
        ],
    }


@pytest.fixture
def form(template: dict[str, Any]) -> dict[str, Any]:
    inner = [
        {"linkId": "heard", "type": "choice"},
        {"linkId": "why", "type": "string"},
        {"linkId": "note", "type": "string", "repeats": True},
    ]
    return {
        "resourceType": "Questionnaire",
        "status": "active",
        "contained": [template],
        "item": [
            {
                "linkId": "sound",
                "type": "group",
                "repeats": True,
                "item": inner,
                "extension": [extract("sound")],
            }
        ],
    }


@pytest.fixture
def response() -> dict[str, Any]:
    return {
        "resourceType": "QuestionnaireResponse", "id": "qr-1", "status": "completed",
        "subject": {"reference": "Patient/p-1"}, "authored": "2026-03-14T09:30:00+01:00",
        "item": [sound(heard="yes", note=["soft", "late"])],
    }  # fmt: skip


def sound(heard: str = "", why: str = "", note: list[str] | None = None) -> dict[str, Any]:
    items: list[dict[str, Any]] = []
    if heard:
        coding = {"system": "https://a.example/answers", "code": heard}
        items.append({"linkId": "heard", "answer": [{"valueCoding": coding}]})
    if why:
        items.append({"linkId": "why", "answer": [{"valueString": why}]})
    if note:
        items.append({"linkId": "note", "answer": [{"valueString": one} for one in note]})
    return {"linkId": "sound", "item": items}


def call(client: TestClient, response: Any, form: Any, edition: str = "r4") -> Any:
    body = {
        "resourceType": "Parameters",
        "parameter": [
            {"name": "questionnaire-response", "resource": response},
            {"name": "questionnaire", "resource": form},
        ],
    }
    return client.post(f"/fhir/{edition}/QuestionnaireResponse/$extract", json=body, headers=FHIR)


def entries(client: TestClient, response: Any, form: Any) -> list[dict[str, Any]]:
    """The entries made of templates; the trail at their end is looked at elsewhere."""
    answer = call(client, response, form)
    assert answer.status_code == 200, answer.text
    parts = {part["name"]: part["resource"] for part in answer.json()["parameter"]}
    if "return" not in parts:
        return []
    assert not has_errors(validate(parts["return"]))
    found: list[dict[str, Any]] = parts["return"]["entry"]
    assert [target["reference"] for target in found[-1]["resource"]["target"]] == [
        entry["fullUrl"] for entry in found[:-1]
    ]
    return found[:-1]


def rules(answer: Any) -> list[str]:
    assert answer.status_code == 422, answer.text
    return [
        issue["details"]["coding"][0]["code"]
        for issue in answer.json()["issue"]
        if issue["severity"] == "error"
    ]


def test_answers_fill_the_template(still: TestClient, form: Any, response: Any) -> None:
    (entry,) = entries(still, response, form)
    assert entry["resource"] == {
        "resourceType": "Observation",
        "status": "final",
        "code": {
            "coding": [{"system": "https://a.example/codes", "code": "s4"}],
            "text": "Fourth heart sound",
        },
        "subject": {"reference": "Patient/p-1"},
        "effectiveDateTime": "2026-03-14T09:30:00+01:00",
        "valueCodeableConcept": {"coding": [{"system": "https://a.example/answers", "code": "yes"}]},
        # an element whose context gives several results stands several times, one with none is gone
        "note": [{"text": "soft"}, {"text": "late"}],
    }
    assert entry["request"] == {"method": "POST", "url": "Observation"}
    assert entry["fullUrl"].startswith("urn:uuid:")
    assert entries(still, response, form)[0]["fullUrl"] == entry["fullUrl"]


def test_what_observation_based_extraction_cannot_say(still: TestClient, form: Any, response: Any) -> None:
    """SD-8: that something could not be assessed."""
    response["item"] = [sound(why="dressing in the way")]
    (entry,) = entries(still, response, form)
    assert entry["resource"]["dataAbsentReason"] == {"text": "dressing in the way"}
    assert "valueCodeableConcept" not in entry["resource"]
    assert "note" not in entry["resource"]


def test_each_repetition_is_a_resource(still: TestClient, form: Any, response: Any) -> None:
    response["item"] = [sound(heard="yes"), sound(heard="no")]
    found = entries(still, response, form)
    codes = [entry["resource"]["valueCodeableConcept"]["coding"][0]["code"] for entry in found]
    assert codes == ["yes", "no"]
    assert len({entry["fullUrl"] for entry in found}) == 2


def test_no_answer_is_no_resource(still: TestClient, form: Any, response: Any) -> None:
    response["item"] = []
    assert entries(still, response, form) == []
    # at the root a resource is made all the same
    rooted = {**form, "extension": [extract("sound")], "item": []}
    (entry,) = entries(still, {**response, "item": []}, rooted)
    assert entry["resource"]["subject"] == {"reference": "Patient/p-1"}


def test_every_answer_of_a_question_is_a_resource(still: TestClient, form: Any, response: Any) -> None:
    form["contained"].append(
        {"resourceType": "Basic", "id": "word", "code": {"_text": value("answer.value.ofType(string)")}}
    )
    form["item"].append(
        {"linkId": "words", "type": "string", "repeats": True, "extension": [extract("word")]}
    )
    response["item"] = [{"linkId": "words", "answer": [{"valueString": "a"}, {"valueString": "b"}]}]
    found = entries(still, response, form)
    assert [entry["resource"]["code"]["text"] for entry in found] == ["a", "b"]


def test_allocated_ids_tie_resources_together(still: TestClient, form: Any, response: Any) -> None:
    form["extension"] = [{"url": SDC + "extractAllocateId", "valueString": "report"},
                         extract("report", fullUrl="%report")]  # fmt: skip
    form["contained"][0]["derivedFrom"] = [{"_reference": value("%report")}]
    form["contained"].append(
        {"resourceType": "Observation", "id": "report", "status": "final", "code": {"text": "Whole"}}
    )
    whole, part = entries(still, response, form)
    assert whole["fullUrl"].startswith("urn:uuid:")
    assert part["resource"]["derivedFrom"] == [{"reference": whole["fullUrl"]}]
    # a variable within a text is none
    form["contained"][0]["derivedFrom"] = [{"_display": value("'%report'")}]
    _, part = entries(still, response, form)
    assert part["resource"]["derivedFrom"] == [{"display": "%report"}]


def test_an_update_and_its_conditions(still: TestClient, form: Any, response: Any) -> None:
    conditions = {
        "resourceId": "'obs-' + %resource.id", "fullUrl": "'https://a.example/fhir/Observation/obs-qr-1'",
        "ifMatch": "'W/\"3\"'", "ifNoneExist": "'identifier=7'",
    }  # fmt: skip
    form["item"][0]["extension"] = [extract("sound", **conditions)]
    (entry,) = entries(still, response, form)
    assert entry["fullUrl"] == "https://a.example/fhir/Observation/obs-qr-1"
    assert entry["resource"]["id"] == "obs-qr-1"
    assert entry["request"] == {
        "method": "PUT", "url": "Observation/obs-qr-1", "ifMatch": 'W/"3"', "ifNoneExist": "identifier=7",
    }  # fmt: skip


def test_a_bundle_of_templates(still: TestClient, form: Any, response: Any, template: Any) -> None:
    inner = {key: held for key, held in template.items() if key not in ("id", "valueCodeableConcept", "note")}
    inner["dataAbsentReason"] = {"text": "not asked"}
    bundle = {
        "resourceType": "Bundle",
        "id": "all",
        "type": "transaction",
        "entry": [{"fullUrl": "urn:uuid:5f0c0d7e-7c1b-4a4e-8f2e-0d8a4c1b2a3f", "resource": inner,
                   "request": {"method": "POST", "url": "Observation"}}],
    }  # fmt: skip
    reference = {"reference": "#all"}
    made = {**form, "contained": [bundle], "item": [],
            "extension": [{"url": SDC + "templateExtractBundle", "valueReference": reference}]}  # fmt: skip
    (entry,) = entries(still, {**response, "item": []}, made)
    assert entry["resource"]["effectiveDateTime"] == "2026-03-14T09:30:00+01:00"


@pytest.mark.parametrize(
    ("change", "rule"),
    [
        ({"_effectiveDateTime": value("%resource.(")}, "sdc-expression"),
        ({"_effectiveDateTime": value("%nobody")}, "sdc-expression"),
        ({"_effectiveDateTime": value("'a' | 'b'")}, "sdc-several-values"),
        ({"_status": value("'bogus'"), "status": None}, None),
    ],
)
def test_errors_are_told_all_at_once(
    still: TestClient, form: Any, response: Any, change: Any, rule: str | None
) -> None:
    made = deepcopy(form)
    sound_ = made["contained"][0] | change
    made["contained"][0] = {key: held for key, held in sound_.items() if held is not None}
    made["item"][0]["extension"].append(extract("missing"))
    found = rules(call(still, response, made))
    assert "sdc-no-template" in found
    assert rule is None or rule in found
    del made["item"][0]["extension"][1]
    assert rules(call(still, response, made))


def test_what_asks_for_too_much_ends(still: TestClient, form: Any, response: Any) -> None:
    many = "%resource.descendants() | %resource.descendants()"
    deep: dict[str, Any] = {"_text": value("'x'")}
    form["contained"][0]["note"] = [{"extension": [context(many)] * 6, **deep}]
    response["item"] = [sound(note=[str(number) for number in range(40)])]
    found = rules(call(still, response, form))
    assert {"sdc-expression", "sdc-too-many"} & set(found)
