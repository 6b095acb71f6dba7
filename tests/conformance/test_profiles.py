"""Profiles: bounds, types, values, bindings, slices; from a snapshot or from a differential."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import pytest

from fhirgallop.conformance.editions import load
from fhirgallop.conformance.editions.package import Package
from fhirgallop.conformance.registry import Registry
from fhirgallop.conformance.source import read
from fhirgallop.conformance.validator import thorough

BASE = "http://hl7.org/fhir/StructureDefinition/Observation"
URL = "https://clinic.example/StructureDefinition/p"
SNOMED = "http://snomed.info/sct"
Found = list[tuple[str, str]]


def _profile(elements: list[dict[str, Any]], url: str = URL, base: str = BASE, **more: Any) -> dict[str, Any]:
    view = more.pop("view", "differential")
    for element in elements:
        element.setdefault("id", element["path"])
    return {
        "resourceType": "StructureDefinition",
        "url": url,
        "type": "Observation",
        "kind": "resource",
        "derivation": "constraint",
        "baseDefinition": base,
        view: {"element": elements},
        **more,
    }


def _judge(resource: dict[str, Any], *profiles: dict[str, Any], value_sets: Any = ()) -> Found:
    package = Package("test", "1", (), {p["url"]: p for p in profiles}, {v["url"]: v for v in value_sets}, {})
    issues = thorough(read(resource), Registry(load("R4"), [package]), [profiles[0]["url"]])
    return [(i.rule, i.expression) for i in issues if i.severity != "information"]


def _element(path: str, **said: Any) -> dict[str, Any]:
    return {"path": path, **said}


ELEMENTS: list[tuple[dict[str, Any], Found]] = [
    (_element("Observation.method", min=1), [("cardinality-min", "Observation")]),
    (_element("Observation.performer", max="0"), [("cardinality-max", "Observation")]),
    (_element("Observation.category", min=2), [("cardinality-min", "Observation")]),
    (
        _element("Observation.value[x]", type=[{"code": "Quantity"}]),
        [("type-not-allowed", "Observation.value.ofType(CodeableConcept)")],
    ),
    (_element("Observation.value[x]", type=[{"code": "CodeableConcept"}]), []),
    (_element("Observation.status", fixedCode="amended"), [("fixed-value", "Observation.status")]),
    (_element("Observation.status", fixedCode="final"), []),
    (_element("Observation.code", patternCodeableConcept={"coding": [{"system": SNOMED}]}), []),
    (
        _element("Observation.code", patternCodeableConcept={"coding": [{"system": "https://loinc.org"}]}),
        [("pattern-value", "Observation.code")],
    ),
    (
        _element("Observation.code", fixedCodeableConcept={"coding": [{"system": SNOMED}]}),
        [("fixed-value", "Observation.code")],
    ),
    (
        _element(
            "Observation.subject",
            type=[{"code": "Reference", "targetProfile": ["http://hl7.org/fhir/StructureDefinition/Group"]}],
        ),
        [("reference-target", "Observation.subject")],
    ),
    (_element("Observation.code.text", maxLength=3), [("primitive-length", "Observation.code.text")]),
    (_element("Observation.code.coding.display", min=1), [("cardinality-min", "Observation.code.coding[0]")]),
    (
        _element(
            "Observation",
            constraint=[
                {
                    "key": "x-1",
                    "severity": "error",
                    "human": "A method is said",
                    "expression": "method.exists()",
                }
            ],
        ),
        [("x-1", "Observation")],
    ),
    (
        _element("Observation.valueCodeableConcept.text", min=1),
        [("cardinality-min", "Observation.value.ofType(CodeableConcept)")],
    ),
]


@pytest.mark.parametrize("view", ["differential", "snapshot"])
@pytest.mark.parametrize(("element", "found"), ELEMENTS)
def test_elements(observation: dict[str, Any], element: dict[str, Any], found: Found, view: str) -> None:
    assert _judge(observation, _profile([dict(element)], view=view)) == found


def test_bindings_of_a_profile(observation: dict[str, Any]) -> None:
    url = "https://clinic.example/ValueSet/v"
    for code, found in (("277455002", []), ("1", [("binding-required", "Observation.code")])):
        value_set = {
            "resourceType": "ValueSet",
            "url": url,
            "compose": {"include": [{"system": SNOMED, "concept": [{"code": code}]}]},
        }
        bound = _element("Observation.code", binding={"strength": "required", "valueSet": url})
        assert _judge(observation, _profile([bound]), value_sets=[value_set]) == found
    bound = _element("Observation.code", binding={"strength": "required", "valueSet": url})
    assert _judge(observation, _profile([bound])) == [("binding-not-judged", "Observation.code")]


def test_a_differential_is_laid_over_the_profile_it_derives_from(observation: dict[str, Any]) -> None:
    parent = _profile([_element("Observation.method", min=1)], url=URL + "-parent")
    child = _profile([_element("Observation.device", min=1)], base=URL + "-parent")
    assert _judge(observation, child, parent) == [("cardinality-min", "Observation")] * 2
    assert _judge(observation, child) == [("profile-unknown", "Observation")]
    circle = _profile([_element("Observation.device", min=1)], base=URL)
    assert _judge(observation, circle) == [("profile-unknown", "Observation")]


def test_a_profile_of_another_type(observation: dict[str, Any]) -> None:
    assert _judge(observation, _profile([], type="Patient", base=BASE.replace("Observation", "Patient"))) == [
        ("profile-type", "Observation")
    ]


def _sliced(kind: str, path: str, slices: list[dict[str, Any]], **slicing: Any) -> dict[str, Any]:
    head = _element(
        "Observation.component",
        slicing={"discriminator": [{"type": kind, "path": path}], "rules": "open", **slicing},
    )
    return _profile([head, *slices])


def _slice(name: str, *, minimum: int = 0, maximum: str = "*", **said: Any) -> list[dict[str, Any]]:
    ident = f"Observation.component:{name}"
    rows = [_element("Observation.component", id=ident, sliceName=name, min=minimum, max=maximum)]
    rows += [_element(f"Observation.component.{p}", id=f"{ident}.{p}", **v) for p, v in said.items()]
    return rows


def _code(code: str) -> dict[str, Any]:
    return {"coding": [{"system": SNOMED, "code": code}]}


def _components(observation: dict[str, Any], *components: dict[str, Any]) -> dict[str, Any]:
    del observation["valueCodeableConcept"]
    observation["component"] = list(components)
    return observation


GRADE = {"code": _code("1"), "valueInteger": 3}
PITCH = {"code": _code("2"), "valueString": "low"}
OTHER = {"code": _code("9"), "valueString": "x"}


def _by_code(**slicing: Any) -> dict[str, Any]:
    slices = _slice("grade", minimum=1, maximum="1", code={"patternCodeableConcept": _code("1")})
    slices += _slice("pitch", code={"patternCodeableConcept": _code("2")})
    return _sliced("pattern", "code", slices, **slicing)


@pytest.mark.parametrize(
    ("slicing", "components", "found"),
    [
        ({}, [GRADE, PITCH, OTHER], []),
        ({}, [PITCH], [("slice-min", "Observation")]),
        ({}, [GRADE, GRADE], [("slice-max", "Observation")]),
        ({"rules": "closed"}, [GRADE, OTHER], [("slice-closed", "Observation.component[1]")]),
        ({"rules": "openAtEnd"}, [OTHER, GRADE], [("slice-order", "Observation.component[1]")]),
        ({"rules": "openAtEnd"}, [GRADE, OTHER], []),
        ({"ordered": True}, [PITCH, GRADE], [("slice-order", "Observation.component[1]")]),
        ({"ordered": True}, [GRADE, OTHER, PITCH], []),
    ],
)
def test_slices_by_pattern(
    observation: dict[str, Any], slicing: dict[str, Any], components: list[Any], found: Found
) -> None:
    assert _judge(_components(observation, *components), _by_code(**slicing)) == found


def test_slices_by_a_value_below(observation: dict[str, Any]) -> None:
    slices = _slice("grade", minimum=1)
    slices.append(
        _element(
            "Observation.component.code.coding.code",
            id="Observation.component:grade.code.coding.code",
            fixedCode="1",
        )
    )
    slices.append(
        _element(
            "Observation.component.value[x]",
            id="Observation.component:grade.value[x]",
            type=[{"code": "integer"}],
        )
    )
    profile = _sliced("value", "code.coding.code", slices)
    assert _judge(_components(dict(observation), GRADE), profile) == []
    wrong = {**GRADE, "valueString": "3"}
    del wrong["valueInteger"]
    assert _judge(_components(dict(observation), wrong), profile) == [
        ("type-not-allowed", "Observation.component[0].value.ofType(string)")
    ]


def test_slices_by_type_and_by_existence(observation: dict[str, Any]) -> None:
    value = _profile(
        [
            _element(
                "Observation.value[x]",
                slicing={"discriminator": [{"type": "type", "path": "$this"}], "rules": "open"},
            ),
            _element(
                "Observation.value[x]",
                id="Observation.value[x]:valueCodeableConcept",
                sliceName="valueCodeableConcept",
                type=[{"code": "CodeableConcept"}],
                min=1,
            ),
            _element("Observation.value[x].text", id="Observation.value[x]:valueCodeableConcept.text", min=1),
        ]
    )
    assert _judge(observation, value) == [("cardinality-min", "Observation.value.ofType(CodeableConcept)")]
    exists = _sliced(
        "exists",
        "interpretation",
        _slice("read", maximum="0", interpretation={"min": 1}) + _slice("plain", interpretation={"max": "0"}),
    )
    assert _judge(_components(dict(observation), GRADE), exists) == []
    read_one = {**GRADE, "interpretation": [{"text": "high"}]}
    assert _judge(_components(dict(observation), read_one), exists) == [("slice-max", "Observation")]


def test_slices_by_profile_of_a_target(observation: dict[str, Any]) -> None:
    member = _profile([_element("Observation.method", min=1)], url=URL + "-member")
    profile = _profile(
        [
            _element(
                "Observation.hasMember",
                slicing={"discriminator": [{"type": "profile", "path": "resolve()"}], "rules": "open"},
            ),
            _element(
                "Observation.hasMember",
                id="Observation.hasMember:m",
                sliceName="m",
                min=1,
                type=[{"code": "Reference", "targetProfile": [URL + "-member"]}],
            ),
        ]
    )
    inner = {"resourceType": "Observation", "id": "m", "status": "final", "code": {"text": "m"}}
    observation["hasMember"] = [{"reference": "#m"}]
    assert _judge({**observation, "contained": [inner]}, profile, member) == [("slice-min", "Observation")]
    met = {**inner, "method": {"text": "ear"}}
    assert _judge({**observation, "contained": [met]}, profile, member) == []


def test_a_way_of_slicing_that_cannot_be_judged_is_said(observation: dict[str, Any]) -> None:
    profile = _sliced("value", "code.where(text = 'x')", _slice("grade", minimum=1))
    assert _judge(_components(observation, GRADE), profile) == [("slice-not-judged", "Observation")]


VITAL = {
    "resourceType": "Observation",
    "text": {"status": "generated", "div": '<div xmlns="http://www.w3.org/1999/xhtml">Heart rate 72</div>'},
    "status": "final",
    "category": [
        {
            "coding": [
                {
                    "system": "http://terminology.hl7.org/CodeSystem/observation-category",
                    "code": "vital-signs",
                }
            ]
        }
    ],
    "code": {"coding": [{"system": "http://loinc.org", "code": "8867-4"}]},
    "subject": {"reference": "Patient/1"},
    "effectiveDateTime": "2026-03-04",
    "valueQuantity": {"value": 72, "unit": "/min", "system": "http://unitsofmeasure.org", "code": "/min"},
}


@pytest.mark.parametrize("edition", ["R4", "R4B", "R5"])
@pytest.mark.parametrize(
    ("change", "rule"),
    [
        ({}, None),
        ({"category": [{"text": "vital"}]}, "slice-min"),
        ({"effectiveDateTime": "2026-03"}, "vs-1"),
        ({"effectiveDateTime": None}, "cardinality-min"),
        ({"subject": {"reference": "Group/1"}}, "reference-target"),
        ({"valueQuantity": None}, "vs-2"),
        ({"valueQuantity": {**VITAL["valueQuantity"], "code": "/min{beats}"}}, "fixed-value"),
        (
            {"valueQuantity": {"value": 72, "system": "http://unitsofmeasure.org", "code": "/min"}},
            "cardinality-min",
        ),
    ],
)
def test_a_vital_sign_meets_the_core_profile_without_naming_it(
    errors: Callable[..., Found], edition: str, change: dict[str, Any], rule: str | None
) -> None:
    resource = {k: v for k, v in {**VITAL, **change}.items() if v is not None}
    assert [found for found, _ in errors(resource, edition)] == ([rule] if rule else [])


def test_blood_pressure_with_a_missing_diastolic_says_why(errors: Callable[..., Found]) -> None:
    def component(code: str, **more: Any) -> dict[str, Any]:
        return {"code": {"coding": [{"system": "http://loinc.org", "code": code}]}, **more}

    systolic = component(
        "8480-6",
        valueQuantity={"value": 120, "unit": "mmHg", "system": "http://unitsofmeasure.org", "code": "mm[Hg]"},
    )
    resource = {**VITAL, "code": {"coding": [{"system": "http://loinc.org", "code": "85354-9"}]}}
    del resource["valueQuantity"]
    reason = {
        "coding": [{"system": "http://terminology.hl7.org/CodeSystem/data-absent-reason", "code": "unknown"}]
    }
    assert errors({**resource, "component": [systolic, component("8462-4", dataAbsentReason=reason)]}) == []
    assert errors({**resource, "component": [systolic]}) == [("slice-min", "Observation")]
    assert errors({**resource, "component": [systolic, component("8462-4")]}) == [
        ("vs-3", "Observation.component[1]")
    ]


def test_every_core_and_own_profile_can_be_read(known: Callable[[str], Registry]) -> None:
    from fhirgallop.conformance.profile_tree import read_profile  # noqa: PLC0415 - used here only
    from fhirgallop.conformance.registry import own_definitions  # noqa: PLC0415 - used here only

    for edition in ("R4", "R4B", "R5"):
        registry = known(edition)
        urls = [*registry.edition.profiles, *own_definitions().structures]
        assert len(urls) > 30
        assert [url for url in urls if registry.profile(url) and read_profile(url, registry) is None] == []
