"""Observation-based extraction, rule by rule.

The form is the "Weight & Height tracking panel" that the SDC guide publishes as an example (HL7/sdc, file
questionnaire-sdc-profile-example-weight-height.json, commit 0eac922a): codes, types and units are its own,
the extraction flags are added as the guide's page on extraction describes. The response is invented.
"""

from __future__ import annotations

from copy import deepcopy
from decimal import Decimal

import pytest
from hypothesis import given
from hypothesis import strategies as st

from fhirgallop.codes import fhirjson
from fhirgallop.observations.extract import extract

SDC = "http://hl7.org/fhir/uv/sdc/StructureDefinition/sdc-questionnaire-"
LOINC = "http://loinc.org"


def flag(value):
    return {
        "url": SDC + "observationExtract",
        "valueBoolean" if isinstance(value, bool) else "valueCode": value,
    }


def category(code):
    return {"url": SDC + "observation-extract-category", "valueCodeableConcept": {"coding": [{"code": code}]}}


def unit(code):
    coding = {"system": "http://unitsofmeasure.org", "code": code}
    return {"url": "http://hl7.org/fhir/StructureDefinition/questionnaire-unit", "valueCoding": coding}


def question(link, code, kind="decimal", *extensions, **more):
    made = {"linkId": link, "type": kind, "text": f"Question {link}", **more}
    if code:
        made["code"] = [{"system": LOINC, "code": code, "display": code}]
    if extensions:
        made["extension"] = list(extensions)
    return made


@pytest.fixture
def form():
    return {
        "resourceType": "Questionnaire",
        "extension": [flag(True), category("vital-signs")],
        "item": [
            question("/29463-7", "29463-7", "decimal", unit("kg")),
            question("/8352-7", "8352-7", "choice", category("survey")),
            question("/8302-2", "8302-2", "decimal", unit("[in_i]")),
            question("/39156-5", "39156-5", "decimal", unit("kg/m2"), flag(False)),
        ],
    }


def answer(link, *answers, items=None):
    made = {"linkId": link, "answer": list(answers)}
    if items:
        made["item"] = items
    return made


@pytest.fixture
def response():
    return {
        "resourceType": "QuestionnaireResponse",
        "id": "r1",
        "status": "completed",
        "subject": {"reference": "Patient/p17"},
        "encounter": {"reference": "Encounter/v9"},
        "authored": "2026-03-14T09:30:00+01:00",
        "author": {"reference": "Practitioner/ex1"},
        "basedOn": [{"reference": "ServiceRequest/s1"}],
        "partOf": [{"reference": "Procedure/x1"}, {"reference": "Observation/o1"}],
        "item": [
            answer("/29463-7", {"valueDecimal": Decimal("70.50")}),
            answer(
                "/8352-7",
                {"valueCoding": {"system": LOINC, "code": "LA11871-3", "display": "Underwear or less"}},
            ),
            {"linkId": "/8302-2"},
            answer("/39156-5", {"valueDecimal": Decimal("22.1")}),
        ],
    }


def rules(issues, severity=""):
    return [i.rule for i in issues if not severity or i.severity == severity]


def test_the_elements_that_the_guide_lists(form, response):
    found, issues = extract(response, form)
    weight, clothes = found
    assert rules(issues) == ["sdc-reference-type"], "an Observation is no part of an Observation"
    assert {key: weight[key] for key in weight if key not in ("text", "identifier")} == {
        "resourceType": "Observation",
        "basedOn": [{"reference": "ServiceRequest/s1"}],
        "partOf": [{"reference": "Procedure/x1"}],
        "status": "final",
        "category": [{"coding": [{"code": "vital-signs"}]}],
        "code": {
            "coding": [{"system": LOINC, "code": "29463-7", "display": "29463-7"}],
            "text": "Question /29463-7",
        },
        "subject": {"reference": "Patient/p17"},
        "encounter": {"reference": "Encounter/v9"},
        "effectiveDateTime": "2026-03-14T09:30:00+01:00",
        "issued": "2026-03-14T09:30:00+01:00",
        "performer": [{"reference": "Practitioner/ex1"}],
        "valueQuantity": {
            "value": Decimal("70.50"),
            "unit": "kg",
            "system": "http://unitsofmeasure.org",
            "code": "kg",
        },
        "derivedFrom": [{"reference": "QuestionnaireResponse/r1"}],
    }
    assert b'"value":70.50' in fhirjson.write(weight), "digits survive"
    assert clothes["category"] == [{"coding": [{"code": "survey"}]}], "the nearest level wins"
    assert clothes["valueCodeableConcept"]["coding"][0]["code"] == "LA11871-3"
    assert "<p>Question /29463-7: 70.50 kg</p>" in weight["text"]["div"]


@pytest.mark.parametrize("package", ["fhir.resources.R4B", "fhir.resources"])
@pytest.mark.parametrize("relation", ["component", "member", True])
def test_the_general_model_library_accepts_them(form, response, package, relation):
    model = pytest.importorskip(f"{package}.observation", reason="the model library is not installed")
    found = extract(response, form)[0] + panel(form, response, relation)
    assert found
    for observation in found:
        model.Observation.model_validate_json(fhirjson.write(observation))


def test_skipped_and_refused_questions_give_nothing(form, response):
    assert [o["code"]["coding"][0]["code"] for o in extract(response, form)[0]] == ["29463-7", "8352-7"]


def test_each_of_several_answers_is_an_observation_of_its_own(form, response):
    response["item"] = [answer("/8352-7", *({"valueCoding": {"code": c}} for c in "AB"))]
    found, _ = extract(response, form)
    assert [o["valueCodeableConcept"]["coding"][0]["code"] for o in found] == ["A", "B"]
    assert len({o["identifier"][0]["value"] for o in found}) == 2


def test_identities_are_stable_and_of_this_response(form, response):
    once, again = extract(response, form)[0], extract(deepcopy(response), form)[0]
    assert once == again
    response["id"] = "r2"
    assert extract(response, form)[0][0]["identifier"] != once[0]["identifier"]


def test_nothing_to_extract_is_a_success_with_a_word(form, response):
    response["item"] = []
    found, issues = extract(response, form)
    assert not found
    assert [(i.rule, i.severity) for i in issues] == [
        ("sdc-reference-type", "warning"),
        ("sdc-nothing-to-extract", "information"),
    ]


@pytest.mark.parametrize("status", ["in-progress", "stopped", "entered-in-error", None])
def test_only_completed_forms_are_extracted(form, response, status):
    found, issues = extract(response | {"status": status}, form)
    assert not found
    assert rules(issues) == ["sdc-not-completed"]


BODY_WEIGHT = [{"system": LOINC, "code": code} for code in ("29463-7", "3141-9", "8341-0")]


@pytest.mark.parametrize(
    ("flags", "codes"),
    [
        ((None, None, None), ["29463-7", "3141-9", "8341-0"]),
        ((True, None, None), ["29463-7"]),
        ((True, True, False), ["29463-7", "3141-9"]),
        ((False, None, None), ["3141-9", "8341-0"]),
        ((False, False, False), []),
    ],
)
def test_flags_on_codes_choose_among_them(form, response, flags, codes):
    """The guide's example of three body weights: when any Coding is tagged, only those are used."""
    item = question("w", "", "quantity")
    item["code"] = [
        dict(code, **({} if value is None else {"extension": [flag(value)]}))
        for code, value in zip(BODY_WEIGHT, flags, strict=True)
    ]
    form["item"] = [item]
    response["item"] = [answer("w", {"valueQuantity": {"value": 70, "code": "kg"}})]
    found, _ = extract(response, form)
    assert [c["code"] for o in found for c in o["code"]["coding"]] == codes
    assert "extension" not in str(found)


def test_a_flagged_code_alone_is_enough(form, response):
    del form["extension"]
    form["item"] = [question("w", "", "integer")]
    form["item"][0]["code"] = [{"code": "x", "extension": [flag(True)]}]
    response["item"] = [answer("w", {"valueInteger": 3})]
    assert [o["valueInteger"] for o in extract(response, form)[0]] == [3]
    form["item"][0]["code"] = [{"code": "x"}]
    assert extract(response, form)[0] == []


def test_flags_are_inherited_until_overridden(form, response):
    form["item"] = [
        question("g", "", "group", flag(False), item=[
            question("a", "1"),
            question("h", "", "group", flag(True), item=[question("b", "2")]),
        ]),
    ]  # fmt: skip
    response["item"] = [
        {"linkId": "g", "item": [answer("a", {"valueDecimal": 1}),
                                 {"linkId": "h", "item": [answer("b", {"valueDecimal": 2})]}]},
    ]  # fmt: skip
    assert [o["code"]["coding"][0]["code"] for o in extract(response, form)[0]] == ["2"]


def panel(form, response, relation):
    form["item"] = [
        question("bp", "85354-9", "group", flag(True), item=[
            question("sys", "8480-6", "decimal", unit("mm[Hg]"), flag(relation)),
            question("dia", "8462-4", "decimal", unit("mm[Hg]"), flag(relation)),
        ]),
    ]  # fmt: skip
    response["item"] = [
        {"linkId": "bp", "item": [answer("sys", {"valueDecimal": Decimal(120)}),
                                  answer("dia", {"valueDecimal": Decimal(80)})]},
    ]  # fmt: skip
    return extract(response, form)[0]


def test_components(form, response):
    (made,) = panel(form, response, "component")
    assert [(c["code"]["coding"][0]["code"], c["valueQuantity"]["value"]) for c in made["component"]] == [
        ("8480-6", Decimal(120)),
        ("8462-4", Decimal(80)),
    ]
    assert not any(key.startswith("value") for key in made)


def test_members(form, response):
    group, *members = panel(form, response, "member")
    assert group["hasMember"] == [{"reference": m["identifier"][0]["value"]} for m in members]
    assert [m["valueQuantity"]["value"] for m in members] == [Decimal(120), Decimal(80)]


def test_derived_and_independent(form, response):
    form_two = deepcopy(form)
    form_two["item"] = [
        question("p", "1", "string", item=[question("c", "2", "string", flag("derived"))]),
    ]
    response["item"] = [answer("p", {"valueString": "a", "item": [answer("c", {"valueString": "b"})]})]
    parent, child = extract(response, form_two)[0]
    assert child["derivedFrom"][1] == {"reference": parent["identifier"][0]["value"]}
    for relation in (True, "independent"):
        found = panel(form, response, relation)
        assert [o["code"]["coding"][0]["code"] for o in found] == ["8480-6", "8462-4"], (
            "the group says nothing"
        )


def test_a_repeated_group_is_a_panel_each_time(form, response):
    panel(form, response, "component")
    response["item"].append({"linkId": "bp", "item": [answer("sys", {"valueDecimal": Decimal(110)})]})
    first, second = extract(response, form)[0]
    assert (len(first["component"]), len(second["component"])) == (2, 1)
    assert first["identifier"] != second["identifier"]


@pytest.mark.parametrize(
    ("kind", "given_answer", "value", "rule"),
    [
        ("boolean", {"valueBoolean": False}, {"valueBoolean": False}, []),
        ("integer", {"valueInteger": 7}, {"valueInteger": 7}, []),
        ("decimal", {"valueDecimal": Decimal("1.20")}, {"valueQuantity": {"value": Decimal("1.20")}},
         ["sdc-no-unit"]),
        ("string", {"valueString": "a<b"}, {"valueString": "a<b"}, []),
        ("date", {"valueDate": "2026-03-14"}, {"valueDateTime": "2026-03-14"}, []),
        ("dateTime", {"valueDateTime": "2026"}, {"valueDateTime": "2026"}, []),
        ("time", {"valueTime": "09:30:00"}, {"valueTime": "09:30:00"}, []),
        ("url", {"valueUri": "urn:x"}, {"valueString": "urn:x"}, []),
        ("quantity", {"valueQuantity": {"value": 3, "comparator": "<"}},
         {"valueQuantity": {"value": 3, "comparator": "<"}}, ["sdc-comparator"]),
        ("attachment", {"valueAttachment": {"title": "x"}}, None, ["sdc-value-not-supported"]),
        ("quantity", {"valueQuantity": {"unit": "cm"}}, None, ["sdc-value-not-supported"]),
    ],
)  # fmt: skip
def test_every_type_of_answer(form, response, kind, given_answer, value, rule):
    form["item"] = [question("x", "1", kind)]
    del response["partOf"]
    response["item"] = [answer("x", given_answer)]
    found, issues = extract(response, form)
    assert [{k: v for k, v in o.items() if k.startswith("value")} for o in found] == (
        [value] if value else []
    )
    assert [r for r in rules(issues) if r != "sdc-nothing-to-extract"] == rule


def test_an_attachment_is_a_value_in_r5(form, response):
    form["item"] = [question("x", "1", "attachment")]
    response["item"] = [answer("x", {"valueAttachment": {"title": "x"}})]
    assert [o["valueAttachment"] for o in extract(response, form, edition="R5")[0]] == [{"title": "x"}]


MODIFIER = [{"url": "urn:not-really", "valueBoolean": True}]


@pytest.mark.parametrize(
    ("change_form", "change_response", "rule"),
    [
        ({"modifierExtension": MODIFIER}, {}, "sdc-modifier"),
        ({}, {"modifierExtension": MODIFIER}, "sdc-modifier"),
        ({}, {"item": [answer("/29463-7", {"valueDecimal": 1, "modifierExtension": MODIFIER})]},
         "sdc-modifier"),
        ({}, {"item": [{"linkId": "/29463-7", "modifierExtension": MODIFIER}]}, "sdc-modifier"),
        ({}, {"item": [answer("/1", {"valueDecimal": 1})]}, "form-unknown-link"),
        ({}, {"subject": {"reference": "Practitioner/1"}}, "sdc-no-subject"),
        ({}, {"resourceType": "Patient"}, "sdc-not-a-response"),
        ({"item": [question("x", "1", "group", item=[{**question("s", ""), "extension": [
            {"url": SDC + "isSubject", "valueBoolean": True}]}])]}, {"item": []}, "sdc-subject-of-its-own"),
        ({"item": [question("x", "1", "decimal", flag("cousin"))]}, {"item": []}, "sdc-bad-flag"),
        ({"item": [question("x", "1", "decimal", flag(True), flag(False))]}, {"item": []}, "sdc-bad-flag"),
        ({"item": [question("x", "", "decimal", flag(True)) | {"code": [{"extension": [flag("member")]}]}]},
         {"item": []}, "sdc-mixed-flags"),
        ({"item": [question("x", "1", "display", flag(True))]}, {"item": []}, "sdc-obsn-1"),
        ({"item": [question("x", "1", "decimal", flag("component"))]},
         {"item": [answer("x", {"valueDecimal": 1})]}, "sdc-no-parent"),
    ],
)  # fmt: skip
def test_what_may_not_be_extracted(form, response, change_form, change_response, rule):
    found, issues = extract(response | change_response, form | change_form)
    assert not found
    assert rule in rules(issues, "error")


@pytest.mark.parametrize(
    "name", ["itemExtractionContext", "targetStructureMap", "definitionExtract", "templateExtract"]
)
def test_other_ways_of_extraction_are_named_as_not_supported(form, response, name):
    form["extension"].append({"url": SDC + name, "valueCode": "Observation"})
    found, issues = extract(response, form)
    assert found
    (issue,) = (i for i in issues if i.rule == "sdc-way-not-supported")
    assert name in issue.text


def test_a_marked_item_without_a_code_is_said(form, response):
    form["item"].append(question("x", ""))
    response["item"].append(answer("x", {"valueDecimal": 1}))
    assert "sdc-no-code" in rules(extract(response, form)[1])


def test_no_answer_is_ever_told(form, response):
    response["item"] = [answer("/8352-7", {"valueAttachment": {"title": "Secret-4711"}})]
    assert "4711" not in str(extract(response, form)[1])


NAMES = [
    "item",
    "answer",
    "linkId",
    "valueDecimal",
    "valueQuantity",
    "valueCoding",
    "extension",
    "url",
    "code",
    "valueBoolean",
    "valueCode",
    "text",
    "reference",
    "type",
]
plain = st.none() | st.booleans() | st.integers() | st.text(max_size=9) | st.sampled_from(["a", "component"])
anything = st.recursive(
    plain,
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.sampled_from(NAMES), inner, max_size=4),
    max_leaves=25,
)
items = st.recursive(
    st.just([]),
    lambda inner: st.lists(
        st.fixed_dictionaries(
            {"linkId": st.sampled_from(["a", "b"])},
            optional={
                "item": inner,
                "answer": st.lists(st.dictionaries(st.sampled_from(NAMES), anything, max_size=2), max_size=2),
                "code": st.just([{"code": "1"}]) | anything,
                "extension": st.lists(
                    st.sampled_from([flag("component"), flag(False), flag("member")]), max_size=1
                ),
            },
        ),
        max_size=3,
    ),
    max_leaves=6,
)


@given(items | anything, items | anything, anything)
def test_no_content_ever_raises(response_items, form_items, rest):
    response = {
        "resourceType": "QuestionnaireResponse",
        "status": "completed",
        "subject": {"reference": "Patient/1"},
        "item": response_items,
        "author": rest,
        "identifier": rest,
        "partOf": rest,
    }
    form = {"extension": [flag(True)], "item": form_items}
    found, issues = extract(response, form)
    assert found or issues
    for observation in found:
        assert observation["code"]["coding"]
