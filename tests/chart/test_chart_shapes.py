"""What a chart comes in, and what hostile or broken charts do: nothing is raised, everything is said."""

from __future__ import annotations

import cProfile
import pstats
from collections.abc import Callable
from decimal import Decimal
from types import SimpleNamespace
from typing import Any

import pytest

from fhirgallop.chart.gather import MAX_NESTING
from fhirgallop.chart.log import MAX_OF_ONE_RULE
from fhirgallop.chart.read import read_chart

AF = {
    "resourceType": "Condition",
    "id": "c1",
    "code": {"coding": [{"system": "http://snomed.info/sct", "code": "49436004"}]},
    "clinicalStatus": {"coding": [{"code": "active"}]},
    "subject": {"reference": "Patient/p1"},
}


@pytest.fixture(scope="module")
def reading(short: SimpleNamespace) -> Callable[..., Any]:
    """Reads any shape for the patient of the short forms."""
    return lambda chart, **keywords: read_chart(chart, short.exam, short.now, **keywords)


@pytest.fixture(scope="module")
def patient(short: SimpleNamespace) -> dict[str, Any]:
    return dict(short.patient)


def ids(chart: Any) -> list[str]:
    return [fact.id for fact in chart.context.facts if fact.source.value != "demographics"]


def rules(chart: Any) -> set[str]:
    return {issue.rule for issue in chart.issues}


def test_a_prefetch_with_its_odd_keys(reading: Callable[..., Any], patient: dict[str, Any]) -> None:
    """CDS Hooks 2.0, Prefetch: null means no data, an OperationOutcome that the client failed."""
    prefetch = {
        "patient": patient,
        "conditions": {"resourceType": "Bundle", "type": "searchset", "entry": [{"resource": AF}]},
        "procedures": None,
        "devices": {"resourceType": "Bundle", "type": "searchset"},
        "observations": {
            "resourceType": "OperationOutcome",
            "issue": [{"severity": "error", "code": "timeout"}],
        },
    }
    chart = reading(prefetch)
    assert ids(chart) == ["condition.atrial-fibrillation"]
    assert rules(chart) == {"chart-part-missing"}


@pytest.mark.parametrize("wrap", [lambda p: [p, AF], lambda p: {"a": [p], "b": AF}, lambda p: [[p, [AF]]]])
def test_lists_and_single_resources(wrap: Any, reading: Callable[..., Any], patient: dict[str, Any]) -> None:
    assert ids(reading(wrap(patient))) == ["condition.atrial-fibrillation"]


def test_further_pages_are_said(reading: Callable[..., Any], patient: dict[str, Any]) -> None:
    page = {
        "resourceType": "Bundle", "type": "searchset", "link": [{"relation": "next", "url": "https://x.example"}],
        "entry": [{"resource": patient}, {"resource": AF}],
    }  # fmt: skip
    chart = reading(page)
    assert rules(chart) == {"chart-part-missing"}
    assert ids(chart) == ["condition.atrial-fibrillation"]


def test_a_history_is_refused(reading: Callable[..., Any], patient: dict[str, Any]) -> None:
    chart = reading(
        {"resourceType": "Bundle", "type": "history", "entry": [{"resource": patient}, {"resource": AF}]}
    )
    assert rules(chart) == {"chart-bundle-type"}
    assert ids(chart) == []


def test_the_newest_version_of_a_resource_is_read_once(
    reading: Callable[..., Any], patient: dict[str, Any]
) -> None:
    old = {**AF, "meta": {"lastUpdated": "2026-01-01T00:00:00Z"}}
    new = {
        **AF,
        "meta": {"lastUpdated": "2026-02-01T00:00:00Z"},
        "verificationStatus": {"coding": [{"code": "refuted"}]},
    }
    for order in ([old, new], [new, old]):
        (fact,) = [f for f in reading([patient, *order]).context.facts if f.id.startswith("condition")]
        assert fact.state.value == "refuted"


def test_what_is_to_be_deleted_is_not_read(reading: Callable[..., Any], patient: dict[str, Any]) -> None:
    entries = [
        {"resource": patient},
        {"resource": AF, "request": {"method": "DELETE", "url": "Condition/c1"}},
    ]
    assert ids(reading({"resourceType": "Bundle", "type": "transaction", "entry": entries})) == []


BROKEN: list[Any] = [
    None, 7, "text", [], {}, [None], [7, "x", [[]]], {"resourceType": 5}, {"resourceType": ""},
    {"a": {"b": {}}}, {"resourceType": "Bundle", "entry": {}}, {"resourceType": "Bundle", "type": []},
    {"resourceType": "Bundle", "entry": [None, 5, {}, {"resource": 5}]},
    {"resourceType": "Bundle", "link": 5, "entry": [{"resource": {}}]}, {7: {"resourceType": "Condition"}},
]  # fmt: skip


@pytest.mark.parametrize("chart", BROKEN)
def test_broken_charts_raise_nothing(chart: Any, reading: Callable[..., Any]) -> None:
    assert ids(reading(chart)) == []


ELEMENTS = [
    "code", "status", "category", "subject", "encounter", "effectiveDateTime", "effectivePeriod",
    "valueQuantity", "valueCodeableConcept", "component", "method", "bodySite", "interpretation",
    "dataAbsentReason", "focus", "performer", "clinicalStatus", "verificationStatus", "abatementDateTime",
    "onsetPeriod", "severity", "type", "property", "device", "performedPeriod", "meta", "identifier",
    "birthDate", "gender", "id", "contained", "conclusionCode", "modifierExtension",
]  # fmt: skip
WRONG: list[Any] = [
    None, 0, -1.5, True, "", "x" * 5000, [], {}, [None], [[]], {"coding": "x"},
    {"coding": [None, {"code": 5}]}, {"value": float("nan")}, {"value": float("inf"), "unit": "mm[Hg]"},
    {"value": Decimal("1E+999999"), "unit": "%"}, {"value": 10**5000, "unit": "%"}, {"reference": 5},
    {"reference": "#"}, {"reference": "Patient/"}, [{"code": {}}], {"start": 5}, {"event": {}},
    {"system": None}, "\ud800",
]  # fmt: skip


@pytest.mark.parametrize("name", ELEMENTS)
@pytest.mark.parametrize(
    "kind", ["Observation", "Condition", "Device", "DeviceUseStatement", "Procedure", "Patient"]
)
def test_any_element_may_have_any_shape(
    kind: str, name: str, reading: Callable[..., Any], patient: dict[str, Any], short: SimpleNamespace
) -> None:
    """Each element of a good resource replaced by each wrong shape: read or refused, never an exception."""
    resource = short.resource
    good: dict[str, dict[str, Any]] = {
        "Observation": resource(
            {"code": "loinc:10230-1", "valueQuantity": "60 %", "effectiveDateTime": "2026-10-01"}
        ),
        "Condition": AF,
        "Device": resource(
            {
                "is": "Device",
                "id": "d",
                "type": {"coding": [{"system": "http://snomed.info/sct", "code": "17107009"}]},
            }
        ),
        "DeviceUseStatement": resource(
            {"is": "DeviceUseStatement", "device": "Device/d", "status": "active"}
        ),
        "Procedure": resource(
            {"is": "Procedure", "status": "completed", "code": "own:procedure.cardioversion"}
        ),
        "Patient": patient,
    }
    for wrong in WRONG:
        chart = reading([patient, {**good[kind], name: wrong}])
        assert chart.resources >= 1


def test_nesting_and_numbers_beyond_reason(reading: Callable[..., Any], patient: dict[str, Any]) -> None:
    nested: Any = AF
    for _ in range(MAX_NESTING + 2):
        nested = {"resourceType": "Bundle", "type": "collection", "entry": [{"resource": nested}]}
    assert "chart-too-deep" in rules(reading(nested))
    deep: Any = []
    for _ in range(100_000):
        deep = [deep]
    assert "chart-too-deep" in rules(reading(deep))


def test_many_issues_of_one_kind_are_counted(reading: Callable[..., Any], patient: dict[str, Any]) -> None:
    many = [{**AF, "id": f"c{n}", "subject": {"reference": "Patient/p9"}} for n in range(300)]
    chart = reading([patient, *many])
    found = [i for i in chart.issues if i.rule == "chart-other-patient"]
    assert len(found) == MAX_OF_ONE_RULE + 1
    assert f"{300 - MAX_OF_ONE_RULE} more" in found[-1].text


def test_ten_thousand_resources_cost_ten_times_a_thousand(
    reading: Callable[..., Any], patient: dict[str, Any], short: SimpleNamespace
) -> None:
    """Counted in function calls, which do not depend on the machine."""
    resource = short.resource

    def calls(count: int) -> int:
        many = [
            resource(
                {"id": f"o{n}", "code": "loinc:10230-1", "valueQuantity": f"{40 + n % 30} %",
                 "effectiveDateTime": f"2025-{1 + n % 12:02}-01", "encounter": f"Encounter/{n}"}
            )
            for n in range(count)
        ]  # fmt: skip
        profile = cProfile.Profile()
        profile.enable()
        chart = reading([patient, *many])
        profile.disable()
        assert len(ids(chart)) == count
        return int(pstats.Stats(profile).total_calls)  # type: ignore[attr-defined]

    calls(10)
    assert calls(10_000) <= 11 * calls(1_000)
