"""`extract` and `code --form`: forms with codes of their own, and forms judged by their Questionnaire."""

from __future__ import annotations

import json

import pytest
from typer.testing import CliRunner

from fhirgallop.cli.main import app
from fhirgallop.conformance.validator import validate

FLAG = {
    "url": "http://hl7.org/fhir/uv/sdc/StructureDefinition/sdc-questionnaire-observationExtract",
    "valueBoolean": True,
}
CATEGORY = {
    "url": "http://hl7.org/fhir/uv/sdc/StructureDefinition/sdc-questionnaire-observation-extract-category",
    "valueCodeableConcept": {
        "coding": [
            {"system": "http://terminology.hl7.org/CodeSystem/observation-category", "code": "vital-signs"}
        ]
    },
}
FORM = {
    "resourceType": "Questionnaire",
    "status": "active",
    "url": "https://fernwood.example/Questionnaire/round",
    "item": [
        {
            "linkId": "hr",
            "type": "decimal",
            "extension": [
                FLAG,
                CATEGORY,
                {
                    "url": "http://hl7.org/fhir/StructureDefinition/questionnaire-unit",
                    "valueCoding": {"system": "http://unitsofmeasure.org", "code": "/min", "display": "/min"},
                },
            ],
            "code": [{"system": "http://loinc.org", "code": "8867-4", "display": "Heart rate"}],
        },
        {"linkId": "remark", "type": "string"},
    ],
}
RESPONSE = {
    "resourceType": "QuestionnaireResponse",
    "status": "completed",
    "questionnaire": "https://fernwood.example/Questionnaire/round",
    "subject": {"reference": "Patient/p1"},
    "authored": "2026-11-30T09:30:00+01:00",
    "item": [
        {"linkId": "hr", "answer": [{"valueDecimal": 78}]},
        {"linkId": "remark", "answer": [{"valueString": "calm"}]},
    ],
}


@pytest.fixture
def files(tmp_path):
    def write(response=RESPONSE, form=FORM):
        (tmp_path / "response.json").write_text(json.dumps(response))
        (tmp_path / "form.json").write_text(json.dumps(form))
        return [str(tmp_path / "response.json"), "--form", str(tmp_path / "form.json")]

    return write


def test_what_is_marked_comes_out_coded_and_conformant(files):
    done = CliRunner().invoke(app, ["extract", *files()])
    assert done.exit_code == 0, done.stderr
    bundle = json.loads(done.stdout)
    (entry,) = bundle["entry"]
    assert entry["resource"]["code"]["coding"][0]["code"] == "8867-4"
    assert entry["resource"]["valueQuantity"]["value"] == 78
    assert not [i for i in validate(done.stdout) if i.is_error]


def test_an_unfinished_form_gives_nothing_and_says_so(files):
    done = CliRunner().invoke(app, ["extract", *files(RESPONSE | {"status": "in-progress"})])
    assert done.stdout == ""
    assert "in-progress" in done.stderr or "completed" in done.stderr


def test_another_resource_is_a_wrong_call(files):
    done = CliRunner().invoke(app, ["extract", *files(response=FORM)])
    assert done.exit_code == 2
    assert "QuestionnaireResponse" in done.stderr


def test_with_its_form_an_unknown_question_is_refused(root, tmp_path):
    examples = root / "examples"
    response = json.loads((examples / "ehr" / "fernwood-exam.questionnaireresponse.json").read_text())
    response["item"].append({"linkId": "no-such-question", "answer": [{"valueString": "x"}]})
    path = tmp_path / "response.json"
    path.write_text(json.dumps(response))
    words = ["code", str(path), "--map", str(examples / "informatician" / "fernwood-heart-form.yaml")]
    with_form = CliRunner().invoke(
        app, [*words, "--form", str(examples / "ehr" / "fernwood-form.questionnaire.json")]
    )
    assert with_form.exit_code == 1
    assert "no-such-question" in with_form.stderr
    assert "form-unknown-link" in with_form.stderr


def test_what_would_not_conform_is_not_given_out(files):
    """A heart rate is a vital sign; without its category the core profile refuses it."""
    bare = json.loads(json.dumps(FORM))
    bare["item"][0]["extension"].remove(CATEGORY)
    done = CliRunner().invoke(app, ["extract", *files(form=bare)])
    assert done.exit_code == 1
    assert done.stdout == ""
    assert "VSCat" in done.stderr
