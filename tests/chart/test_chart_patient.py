"""Nothing of another patient is ever used, and whose a resource is can be followed or it is refused."""

from __future__ import annotations

from copy import deepcopy
from dataclasses import replace
from datetime import datetime
from typing import Any

import pytest

from fhirgallop.chart.person import age
from fhirgallop.chart.read import Chart, read_chart
from fhirgallop.exam.exam import Exam, Party
from fhirgallop.exam.moment import Moment
from fhirgallop.reasoning.review import review

NOW = datetime.fromisoformat("2026-11-30T10:30:00+01:00")
EXAM = Exam(
    Party("F-1", "https://clinic.example/patients"), "X-1", "https://clinic.example/exams",
    Moment("2026-11-30T10:00:00+01:00"), (),
)  # fmt: skip
BY_ID = replace(EXAM, patient=Party("p1", is_fhir_id=True))
OURS = {
    "resourceType": "Patient",
    "id": "p1",
    "identifier": [{"system": "https://clinic.example/patients", "value": "F-1"}],
}
OTHER = {
    "resourceType": "Patient",
    "id": "p2",
    "identifier": [{"system": "https://clinic.example/patients", "value": "F-2"}],
    "birthDate": "1950-01-01",
}


def condition(subject: Any, **more: Any) -> dict[str, Any]:
    return {
        "resourceType": "Condition",
        "code": {"coding": [{"system": "http://snomed.info/sct", "code": "49436004"}]},
        "clinicalStatus": {"coding": [{"code": "active"}]},
        **({"subject": subject} if subject is not None else {}),
        **more,
    }


def read(*resources: Any, exam: Exam = EXAM, **keywords: Any) -> Chart:
    return read_chart(list(resources), exam, NOW, **keywords)


def used(chart: Chart) -> int:
    return sum(fact.id.startswith("condition.") for fact in chart.context.facts)


def entry(url: str, resource: dict[str, Any]) -> dict[str, Any]:
    return {"fullUrl": url, "resource": resource}


def bundle(*entries: dict[str, Any]) -> dict[str, Any]:
    return {"resourceType": "Bundle", "type": "searchset", "entry": list(entries)}


@pytest.mark.parametrize(
    "subject",
    [
        {"reference": "Patient/p1"},
        {"reference": "Patient/p1/_history/4"},
        {"identifier": {"system": "https://clinic.example/patients", "value": "F-1"}},
    ],
)
def test_ours_by_reference_version_or_number(subject: Any) -> None:
    assert used(read(OURS, condition(subject))) == 1


@pytest.mark.parametrize(
    ("subject", "rule"),
    [
        ({"reference": "Patient/p2"}, "chart-other-patient"),
        ({"reference": "Patient/p10"}, "chart-other-patient"),
        ({"reference": "Group/p1"}, "chart-other-patient"),
        ({"reference": "#p1"}, "chart-other-patient"),
        ({"reference": "https://elsewhere.example/fhir/Patient/p1"}, "chart-other-patient"),
        (
            {"identifier": {"system": "https://clinic.example/patients", "value": "F-2"}},
            "chart-other-patient",
        ),
        ({"identifier": {"value": "F-1"}}, "chart-other-patient"),
        ({"display": "F-1"}, "chart-no-patient"),
        (None, "chart-no-patient"),
        ("Patient/p1", "chart-no-patient"),
    ],
)
def test_anything_else_is_refused_and_said(subject: Any, rule: str) -> None:
    chart = read(OURS, OTHER, condition(subject))
    assert used(chart) == 0
    assert rule in {issue.rule for issue in chart.issues}


def test_another_patients_resource_is_not_ours_by_its_own_claims() -> None:
    """Age, sex and findings come from the examination's patient alone."""
    chart = read(OTHER, condition({"reference": "Patient/p2"}))
    assert chart.context.facts == ()
    assert chart.context.patient == EXAM.patient
    assert all(issue.is_error for issue in chart.issues)
    assert not review(EXAM, chart.context).raised


def test_relative_references_are_meant_on_their_own_server() -> None:
    here, there = "https://a.example/fhir", "https://b.example/fhir"
    ours = condition({"reference": "Patient/p1"}, id="c1")
    chart = read(
        bundle(
            entry(f"{here}/Patient/p1", OURS),
            entry(f"{here}/Condition/c1", ours),
            entry(f"{there}/Condition/c1", deepcopy(ours)),
        )
    )
    assert used(chart) == 1
    assert [i.expression for i in chart.issues if i.rule == "chart-other-patient"] == [
        "[0].entry[2].resource"
    ]


def test_absolute_references_within_a_bundle() -> None:
    urn = "urn:uuid:0c3151bd-1cbf-4d64-b04d-cd9187a4c6e0"
    assert used(read(bundle(entry(urn, OURS), entry("", condition({"reference": urn}))))) == 1
    elsewhere = "urn:uuid:11111111-1cbf-4d64-b04d-cd9187a4c6e0"
    assert used(read(bundle(entry(urn, OURS), entry("", condition({"reference": elsewhere}))))) == 0


def test_a_patient_known_by_logical_id_needs_no_patient_resource() -> None:
    assert used(read(condition({"reference": "Patient/p1"}), exam=BY_ID)) == 1
    absolute = condition({"reference": "https://a.example/fhir/Patient/p1"})
    assert used(read(absolute, exam=BY_ID)) == 0
    assert used(read(absolute, exam=BY_ID, base="https://a.example/fhir/")) == 1
    assert used(read(absolute, exam=BY_ID, base="https://b.example/fhir")) == 0


def test_a_business_number_cannot_be_followed_without_the_patient_resource() -> None:
    assert used(read(condition({"reference": "Patient/p1"}))) == 0


def test_contained_patient_by_number() -> None:
    contained = {**OURS, "id": "me"}
    assert used(read(condition({"reference": "#me"}, contained=[contained]))) == 1
    assert used(read(condition({"reference": "#me"}, contained=[{**OTHER, "id": "me"}]))) == 0


def test_anothers_device_is_refused_even_when_the_use_is_ours() -> None:
    device = {
        "resourceType": "Device", "id": "d", "patient": {"reference": "Patient/p2"},
        "type": {"coding": [{"system": "http://snomed.info/sct", "code": "17107009"}]},
    }  # fmt: skip
    use = {
        "resourceType": "DeviceUseStatement", "status": "active", "subject": {"reference": "Patient/p1"},
        "device": {"reference": "Device/d"},
    }  # fmt: skip
    assert not read(OURS, OTHER, device, use).context.facts


def test_references_do_not_reach_another_server() -> None:
    """A device of the same number on another server is another device."""
    here, there = "https://a.example/fhir", "https://b.example/fhir"
    type_ = {"coding": [{"system": "http://snomed.info/sct", "code": "17107009"}]}
    use = {
        "resourceType": "DeviceUseStatement", "id": "u", "status": "active",
        "subject": {"reference": "Patient/p1"}, "device": {"reference": "Device/d"},
    }  # fmt: skip
    device = {"resourceType": "Device", "id": "d", "type": type_}
    for server, facts in ((here, 1), (there, 0)):
        chart = read(
            bundle(
                entry(f"{here}/Patient/p1", OURS),
                entry(f"{here}/DeviceUseStatement/u", use),
                entry(f"{server}/Device/d", device),
            )
        )
        assert len(chart.context.facts) == facts


def test_hostile_issues_never_echo_the_chart() -> None:
    secret = "SECRET-7731"
    resources = [
        {**OTHER, "id": secret, "birthDate": secret},
        condition({"reference": f"Patient/{secret}"}),
        condition({"reference": "Patient/p1"}, onsetDateTime=secret),
        condition({"reference": "Patient/p1"}, verificationStatus={"coding": [{"code": secret}]}),
        {
            "resourceType": "Observation", "status": secret, "subject": {"reference": "Patient/p1"},
            "code": {"coding": [{"system": "http://loinc.org", "code": "10230-1"}]},
        },
        {
            "resourceType": "Observation", "status": "final", "subject": {"reference": "Patient/p1"},
            "code": {"coding": [{"system": "http://loinc.org", "code": "10230-1"}]},
            "effectiveDateTime": secret, "valueQuantity": {"value": 7731, "unit": secret},
        },
    ]  # fmt: skip
    chart = read({**OURS, "birthDate": secret}, {secret: resources, "x": secret})
    assert len(chart.issues) >= 6
    for issue in chart.issues:
        assert "7731" not in str(issue)


@pytest.mark.parametrize(
    ("born", "day", "low", "high"),
    [
        ("1960-11-30", "2026-11-30", "66", None),
        ("1960-12-01", "2026-11-30", "65", None),
        ("2008-02-29", "2026-02-28", "17", None),
        ("2008-02-29", "2026-03-01", "18", None),
        ("1960", "2026-11-30", "65", "66"),
        ("1960-11", "2026-11-15", "65", "66"),
        ("1960-12", "2026-11-30", "65", None),
        ("2026-11-20", "2026-11-30", "0.027", None),
        ("2026", "2026-11-30", "0.000", "0.912"),
    ],
)
def test_age_on_the_day_of_the_examination(born: str, day: str, low: str, high: str | None) -> None:
    found = age(born, day)
    assert (str(found.value), found.high and str(found.high)) == (low, high)


@pytest.mark.parametrize(
    "born", ["1960-13-01", "", "yesterday", 1960, None, "2030-01-01", "1960-01-01T10:00:00Z"]
)
def test_a_birth_date_that_cannot_be_read_leaves_the_age_unknown(born: Any) -> None:
    chart = read({**OURS, "birthDate": born, "gender": "other"})
    assert chart.context.facts == ()
    assert {issue.rule for issue in chart.issues} == {"chart-birth-date"}


def test_sex_and_age_are_of_the_patient() -> None:
    chart = read({**OURS, "birthDate": "1960-01-15", "gender": "male"}, OTHER)
    assert [(f.id, f.answers or (str(f.measure and f.measure.value),)) for f in chart.context.facts] == [
        ("patient.age", ("66",)),
        ("patient.sex", ("male",)),
    ]


def test_now_needs_a_zone() -> None:
    with pytest.raises(ValueError, match="zone"):
        read_chart([], EXAM, NOW.replace(tzinfo=None))
