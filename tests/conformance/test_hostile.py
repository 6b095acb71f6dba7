"""Hostile resources: never an exception, and time that grows with the size, not with its square."""

from __future__ import annotations

import collections
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from fhirgallop.conformance import validate

DIV = '<div xmlns="http://www.w3.org/1999/xhtml">{}</div>'


def _nested(depth: int) -> dict[str, Any]:
    item: dict[str, Any] = {"linkId": "0"}
    for level in range(depth):
        item = {"linkId": str(level + 1), "item": [item]}
    return {"resourceType": "QuestionnaireResponse", "status": "completed", "item": [item]}


def _circle() -> dict[str, Any]:
    patient: dict[str, Any] = {"resourceType": "Patient"}
    patient["contact"] = [patient]
    return patient


HOSTILE: list[Any] = [
    _nested(90),
    _nested(1000),
    _circle(),
    {"resourceType": "Patient", 7: "x"},
    {"resourceType": "Patient", None: "x"},
    {"resourceType": "Patient", "active": {1, 2}},
    {"resourceType": "Patient", "active": object()},
    {"resourceType": "Patient", "birthDate": b"2026"},
    {"resourceType": "Patient", "id": "\ud800", "\udfff": 1},
    {"resourceType": "Patient", "multipleBirthInteger": 10**5000},
    {"resourceType": "Patient", "multipleBirthInteger": float("inf")},
    {"resourceType": "Observation", "valueQuantity": {"value": float("nan")}},
    collections.ChainMap({"resourceType": "Patient"}),
    {"resourceType": ["Patient"]},
    {
        "resourceType": "Bundle",
        "type": "transaction",
        "entry": [None, 1, [], {}, {"resource": 1}, {"fullUrl": []}],
    },
    {"resourceType": "Bundle", "type": [], "entry": {}},
    {"resourceType": "Bundle", "type": "batch", "entry": [{"fullUrl": 1, "resource": {}, "request": []}]},
    {"resourceType": "Observation", "meta": {"profile": [1, None, {}, "", "x" * 10**6]}},
    {"resourceType": "Observation", "code": {"coding": [{"system": "http://loinc.org", "code": []}]}},
    {"resourceType": "Observation", "subject": {"reference": "/" * 10**6}},
    {"resourceType": "Observation", "subject": {"reference": "http://" + "a/" * 10**5}},
    {"resourceType": "Binary", "contentType": "a/b", "data": " " * 10**6 + "!"},
    {"resourceType": "Binary", "contentType": "a" * 10**6, "data": "A" * 10**6},
    {"resourceType": "Observation", "issued": "2" * 10**6},
    {"resourceType": "Observation", "implicitRules": "x" * 10**6 + " "},
    {"resourceType": "Observation", "code": {"coding": [{"code": "a " * 10**6}]}},
    {"resourceType": "Patient", "extension": "x", "_active": [], "name": [{"_given": {}}]},
    {
        "resourceType": "Patient",
        "contained": [{"resourceType": "Patient", "id": "a", "link": [{"other": {"reference": "#a"}}]}],
    },
    {
        "resourceType": "Patient",
        "contained": [{"resourceType": "Patient", "contained": [{"resourceType": "Patient"}]}],
    },
]


@pytest.mark.parametrize("edition", ["R4", "R5"])
@pytest.mark.parametrize("number", range(len(HOSTILE)))
def test_nothing_is_raised_and_something_is_said(number: int, edition: str) -> None:
    issues = validate(HOSTILE[number], edition)
    assert issues
    assert all(isinstance(issue.expression, str) for issue in issues)


@pytest.mark.parametrize(
    "text",
    [
        b"\x00" * 1000,
        b'{"resourceType":"Patient"' + b" " * 10**6,
        b'{"resourceType":"Patient","a":"' + b'\\"' * 10**5,
        b'{"resourceType":"Patient","id":"\\ud800\\udc00\\udc00"}',
        b'{"resourceType":"Observation","valueQuantity":{"value":1e999999999}}',
        b'{"resourceType":"Observation","valueQuantity":{"value":' + b"1" * 400 + b"." + b"1" * 400 + b"}}",
        b'{"resourceType":"Patient","id":1' + b"0" * 10**6 + b"}",
        b"[" * 10**6,
        b'{"a":[' * 10**5,
    ],
    ids=range(9),
)
def test_hostile_texts(text: bytes) -> None:
    assert validate(text)
    assert validate(text.decode(errors="surrogateescape"))


def test_a_narrative_of_many_megabytes() -> None:
    patient = {
        "resourceType": "Patient",
        "text": {"status": "generated", "div": DIV.format("<p>x</p>" * 600_000)},
    }
    assert validate(patient) == []


def test_a_bundle_of_very_many_entries_with_faults_in_all() -> None:
    entry = {
        "fullUrl": "urn:uuid:x",
        "resource": {"resourceType": "Basic", "code": {"text": "x"}, "author": {"reference": "#"}},
    }
    bundle = {"resourceType": "Bundle", "type": "collection", "entry": [dict(entry) for _ in range(8_000)]}
    issues = validate(bundle)
    assert "bdl-7" in {issue.rule for issue in issues}


def test_very_many_contained_resources_that_refer_to_one_another() -> None:
    count = 4_000
    links = [[{"type": "seealso", "other": {"reference": f"#c{(i + 1) % count}"}}] for i in range(count)]
    contained = [{"resourceType": "Patient", "id": f"c{i}", "link": link} for i, link in enumerate(links)]
    patient = {"resourceType": "Patient", "contained": contained, "link": links[0]}
    assert [issue.rule for issue in validate(patient)] == ["dom-6"]
    for resource in contained:
        resource["id"] += "x"
    assert {"ref-1"} <= {issue.rule for issue in validate(patient)}


def test_very_many_faults_in_one_line_of_text() -> None:
    text = b'{"resourceType":"Patient","name":[' + b",".join([b'{"x":1}'] * 20_000) + b"]}"
    issues = [i for i in validate(text) if i.rule == "unknown-element"]
    assert len(issues) == 20_000
    assert len({issue.column for issue in issues}) == 20_000


JSON = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=8),
    lambda inner: (
        st.lists(inner, max_size=3)
        | st.dictionaries(
            st.sampled_from(
                [
                    "resourceType",
                    "id",
                    "meta",
                    "entry",
                    "type",
                    "contained",
                    "extension",
                    "url",
                    "code",
                    "text",
                    "div",
                ]
            )
            | st.text(max_size=5),
            inner,
            max_size=4,
        )
    ),
    max_leaves=20,
)


@given(
    JSON,
    st.sampled_from(["Patient", "Observation", "Bundle", "Parameters", "Heart"]),
    st.sampled_from(["R4", "R4B", "R5"]),
)
@settings(max_examples=300, deadline=None)
def test_any_json_is_judged(value: Any, kind: str, edition: str) -> None:
    validate(value, edition)
    if isinstance(value, dict):
        validate({"resourceType": kind, **value}, edition)
        validate(
            {
                "resourceType": "Bundle",
                "type": "transaction",
                "entry": [{"resource": {**value, "resourceType": kind}}],
            },
            edition,
        )


@given(st.binary(max_size=200))
@settings(max_examples=300, deadline=None)
def test_any_bytes_are_judged(text: bytes) -> None:
    assert validate(text)
