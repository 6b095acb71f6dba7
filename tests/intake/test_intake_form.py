"""QuestionnaireResponses: answers as fields, and what a Questionnaire finds wrong with them."""

from __future__ import annotations

import json
from decimal import Decimal

import pytest

from fhirgallop.intake.questionnaire import read_response
from fhirgallop.intake.record import Amount, Coded, Header

FORM = {
    "resourceType": "Questionnaire",
    "url": "https://fernwood.example/Questionnaire/heart",
    "item": [
        {"linkId": "s4", "type": "choice"},
        {"linkId": "hr", "type": "quantity", "required": True},
        {"linkId": "murmurs", "type": "group", "repeats": True, "item": [
            {"linkId": "grade", "type": "string", "required": True},
            {"linkId": "loud", "type": "boolean", "required": True, "enableWhen": [{}]},
        ]},
    ],
}  # fmt: skip


def rules(reading):
    return [i.rule for i in reading.issues] + [i.rule for r in reading.records for i in r.issues]


def fields(response):
    (record,) = read_response(response).records
    return {name: field.values for name, field in record.fields.items()}


def test_the_header(response):
    (record,) = read_response(response).records
    assert record.form == "questionnaire-response"
    assert record.header == Header("p17", "v9", "2026-03-14T09:30:00+01:00", "EX-1", "E-1", "final")
    response["identifier"] = [{"value": "E-2"}]
    assert read_response(response).records[0].header.identifier == "E-2", "R5 has several identifiers"
    del response["identifier"]
    assert read_response(response).records[0].header.identifier == "r1"


@pytest.mark.parametrize(
    ("answer", "value"),
    [
        ('{"valueBoolean": false}', False),
        ('{"valueDecimal": 1.20}', Decimal("1.20")),
        ('{"valueInteger": 7}', Decimal(7)),
        ('{"valueString": "III/VI"}', "III/VI"),
        ('{"valueDate": "2026-03"}', "2026-03"),
        ('{"valueDateTime": "2026-03-14T09:30:00Z"}', "2026-03-14T09:30:00Z"),
        ('{"valueTime": "09:30:00"}', "09:30:00"),
        ('{"valueUri": "urn:x"}', "urn:x"),
        ('{"valueCoding": {"system": "s", "code": "c", "display": "d"}}', Coded("c", "d", "s")),
        ('{"valueCoding": {"display": "other"}}', Coded("", "other", "")),
        ('{"valueQuantity": {"value": 120.0, "system": "http://unitsofmeasure.org", "code": "m"}}',
         Amount(Decimal("120.0"), "m")),
        ('{"valueQuantity": {"value": 8, "comparator": "<", "unit": "cm"}}', Amount(Decimal(8), "cm", "<")),
    ],
)  # fmt: skip
def test_every_type_of_answer(response, answer, value):
    text = json.dumps(response | {"item": []}).replace(
        '"item": []', f'"item": [{{"linkId": "x", "answer": [{answer}]}}]'
    )
    (record,) = read_response(text).records
    assert record.fields["x"].values == (value,)
    assert str(record.fields["x"].values) == str((value,)), "decimals keep their digits"


def item(link, *values, items=None):
    made = {"linkId": link}
    if values:
        made["answer"] = [{"valueString": v} for v in values]
    if items:
        made["item"] = items
    return made


def test_groups_and_repeats(response):
    response["item"] = [
        item("heart", items=[item("s3", "no"), item("blank")]),
        item("murmur", items=[item("site", "AV", "PV")]),
        item("murmur", items=[item("grade", "2"), item("site", "MV")]),
    ]
    assert fields(response) == {
        "s3": ("no",),
        "blank": (),
        "site": ("AV", "PV"),
        "grade[1]": ("2",),
        "site[1]": ("MV",),
    }


def test_repeats_inside_of_repeats_and_questions_below_answers(response):
    response["item"] = [
        item("m", items=[item("g", items=[item("x", "a")]), item("g", items=[item("x", "b")])]),
        item("m", items=[item("g", items=[item("x", "c")])]),
        {"linkId": "q", "answer": [{"valueString": "1", "item": [item("why", "d")]},
                                   {"valueString": "2", "item": [item("why", "e")]}]},
    ]  # fmt: skip
    assert fields(response) == {
        "x": ("a",), "x[0][1]": ("b",), "x[1]": ("c",), "q": ("1", "2"), "why": ("d",), "why[1]": ("e",),
    }  # fmt: skip


@pytest.mark.parametrize(
    ("status", "header", "rule"),
    [
        ("completed", "final", []),
        ("amended", "amended", []),
        ("in-progress", "preliminary", []),
        ("entered-in-error", "entered-in-error", []),
        ("stopped", "preliminary", ["form-stopped"]),
    ],
)
def test_every_status(response, status, header, rule):
    reading = read_response(response | {"status": status})
    assert reading.records[0].header.status == header
    assert rules(reading) == rule


@pytest.mark.parametrize(
    ("change", "rule"),
    [
        ({"resourceType": "Patient"}, "form-not-a-response"),
        ({"status": "done"}, "form-status"),
        ({"status": None}, "form-status"),
        ({"item": {}}, "form-not-a-list"),
        ({"item": [{"text": "x"}]}, "form-no-link"),
        ({"item": [{"linkId": "x", "answer": {}}]}, "form-not-a-list"),
        ({"item": [{"linkId": "x", "answer": [{"valueString": "a", "valueUri": "b"}]}]}, "form-answer-value"),
        ({"item": [{"linkId": "x", "answer": [{"valueInteger": "7"}]}]}, "form-answer-invalid"),
        ({"item": [{"linkId": "x", "answer": [{"valueQuantity": {"unit": "cm"}}]}]}, "form-answer-invalid"),
        ({"item": [{"linkId": "x", "answer": [{"valueQuantity": {"value": 1, "comparator": "~"}}]}]},
         "form-answer-invalid"),
        ({"item": [item("a", items=[item("x")]), item("b", items=[item("x")])]}, "form-repeated-link"),
        ({"item": [{"linkId": "x", "answer": [{"valueString": "s" * 70_000}]}]}, "form-answer-invalid"),
        ({"item": [item("n" * 300, "1")]}, "record-bad-name"),
        ({"item": [item(f"n{n}", "1") for n in range(2010)]}, "record-too-many-fields"),
    ],
)  # fmt: skip
def test_bad_responses_are_refused(response, change, rule):
    reading = read_response(response | change)
    assert not reading.records
    assert [i.rule for i in reading.issues if i.is_error] == [rule]


def test_nesting_is_limited(response):
    inner = item("x", "1")
    for _ in range(100):
        inner = item("g", items=[inner])
    assert [i.rule for i in read_response(response | {"item": [inner]}).issues] == ["form-too-deep"]


def test_files_and_references_are_said_and_are_no_blanks(response):
    response["item"] = [{"linkId": "photo", "answer": [{"valueAttachment": {"title": "secret"}}]}]
    reading = read_response(response)
    assert rules(reading) == ["form-answer-not-read"]
    assert not reading.records[0].fields
    assert "secret" not in str(reading.records[0].issues)


def test_the_form_judges(response):
    response["item"] = [
        {"linkId": "s4", "answer": [{"valueBoolean": True}]},
        item("murmurs"),
        item("s5", "yes"),
    ]
    response["questionnaire"] = "https://fernwood.example/Questionnaire/lungs"
    reading = read_response(response, questionnaire=FORM)
    assert {(i.rule, i.field, i.severity) for i in reading.issues} == {
        ("form-answer-type", "s4", "error"),
        ("form-unknown-link", "s5", "error"),
        ("form-required", "hr", "error"),
        ("form-required", "grade", "error"),
        ("form-required-conditional", "loud", "information"),
        ("form-other", "questionnaire", "warning"),
    }


def test_a_response_that_fits_its_form(response):
    response["item"].append({"linkId": "hr", "answer": [{"valueQuantity": {"value": 72, "code": "/min"}}]})
    reading = read_response(response, questionnaire=FORM)
    assert not rules(reading)
    assert reading.records
