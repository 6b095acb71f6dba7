"""Laws of reading a chart: no exception, no other patient, no order, nothing of the chart in an issue."""

from __future__ import annotations

import random
from collections import Counter
from datetime import datetime
from typing import Any

from hypothesis import given, settings
from hypothesis import strategies as st

from fhirgallop.chart.read import Chart, read_chart
from fhirgallop.chart.tables import shipped
from fhirgallop.exam.context import Fact, State
from fhirgallop.exam.exam import Exam, Party
from fhirgallop.exam.moment import Moment

NOW = datetime.fromisoformat("2026-11-30T10:30:00+01:00")
EXAM = Exam(
    Party("F-1", "https://clinic.example/patients"), "X-1", "https://clinic.example/exams",
    Moment("2026-11-30T10:00:00+01:00"), (), encounter=Party("V-1", "https://clinic.example/visits"),
)  # fmt: skip
PATIENT = {
    "resourceType": "Patient",
    "id": "p1",
    "identifier": [{"system": "https://clinic.example/patients", "value": "F-1"}],
    "birthDate": "1960-01-15",
    "gender": "female",
}
TABLES = shipped()
CODES = {use: sorted({(c.system, c.code) for c in table}) for use, table in TABLES.uses.items()}
VALUES = sorted(
    {(c.system, c.code) for c in TABLES.presence}
    | {(code.system, code.code) for _, code in TABLES.values}
    | {(code.system, code.code) for _, code in TABLES.axis_values}
)
PRESENCE = sorted((c.system, c.code) for c in TABLES.presence)
TIMES = ["2026-11-30T09:10:00+01:00", "2026-11-30", "2026-10", "2020", "2027-01-01", "soon", ""]
KINDS = {
    "Observation": (
        "observation",
        ["final", "final", "amended", "preliminary", "entered-in-error", "cancelled"],
    ),
    "DiagnosticReport": ("observation", ["final", "partial", "registered"]),
    "Condition": ("condition", [""]),
    "Procedure": ("procedure", ["completed", "in-progress", "not-done", "entered-in-error"]),
    "Device": ("device", ["active", "inactive", "entered-in-error", ""]),
}


def concepts(*pairs: list[tuple[str, str]]) -> st.SearchStrategy[dict[str, Any]]:
    """A CodeableConcept of one to three codings, the first of the first list."""
    more = st.lists(st.one_of(*(st.sampled_from(p) for p in pairs)), max_size=2)
    return st.tuples(st.sampled_from(pairs[0]), more).map(
        lambda found: {"coding": [{"system": s, "code": c} for s, c in (found[0], *found[1])]}
    )


_concept = st.one_of(concepts(PRESENCE), concepts(PRESENCE, VALUES), concepts(VALUES))
_quantity = st.fixed_dictionaries(
    {"value": st.decimals(-10, 5000, places=1)},
    optional={
        "unit": st.sampled_from(["mm[Hg]", "%", "cm2", "ms", "furlong", ""]),
        "comparator": st.sampled_from(["<", ">=", "~"]),
    },
)
_plain = st.sampled_from(
    [{"valueBoolean": True}, {"valueBoolean": False}, {"valueQuantity": {"value": 50, "unit": "%"}},
     {"valueQuantity": {"value": 20, "unit": "mm[Hg]"}}]
)  # fmt: skip
_value = _plain | st.fixed_dictionaries(
    {},
    optional={
        "valueCodeableConcept": _concept,
        "valueQuantity": _quantity,
        "valueBoolean": st.booleans(),
        "dataAbsentReason": _concept,
        "interpretation": _concept.map(lambda concept: [concept]),
    },
)


def _made(
    kind: str, code: Any, status: int, time: str, value: Any, parts: Any, verified: str, clinical: str
) -> Any:
    known, statuses = KINDS[kind]
    return {
        "resourceType": kind,
        "code": code[known],
        "type": code[known],
        "conclusionCode": [code[known]],
        "status": statuses[status % len(statuses)],
        "effectiveDateTime": time,
        "onsetDateTime": time,
        "performedDateTime": time,
        "verificationStatus": {"coding": [{"code": verified}]},
        "clinicalStatus": {"coding": [{"code": clinical}]},
        "component": [{"code": c, **v} for c, v in parts],
        **value,
    }


_resource = st.builds(
    _made,
    st.sampled_from(sorted(KINDS)),
    st.fixed_dictionaries({use: concepts(codes) for use, codes in CODES.items()}),
    st.integers(0, 5),
    st.sampled_from(TIMES),
    _value,
    st.lists(st.tuples(concepts(CODES["observation"], VALUES), _value), max_size=2),
    st.sampled_from(["confirmed", "confirmed", "refuted", "entered-in-error", "provisional", "odd"]),
    st.sampled_from(["active", "active", "resolved", "inactive", "remission", "unknown"]),
)
_json = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=12),
    lambda inner: st.lists(inner, max_size=4)
    | st.dictionaries(
        st.sampled_from(
            ["resourceType", "entry", "resource", "code", "coding", "subject", "reference", "status",
             "component", "valueQuantity", "value", "system", "effectiveDateTime", "x"]
        ),
        inner,
        max_size=5,
    ),
    max_leaves=25,
)  # fmt: skip


def of(subject: str, resources: list[dict[str, Any]]) -> list[dict[str, Any]]:
    return [
        {**r, "id": f"r{n}", "subject": {"reference": subject}, "patient": {"reference": subject}}
        for n, r in enumerate(resources)
    ]


def read(resources: list[Any]) -> Chart:
    return read_chart(resources, EXAM, NOW)


def facts(chart: Chart) -> Counter[Fact]:
    return Counter(chart.context.facts)


@given(_json)
@settings(max_examples=300, deadline=None)
def test_any_json_is_read_or_refused(chart: Any) -> None:
    read_chart(chart, EXAM, NOW)
    read_chart([PATIENT, chart, {**PATIENT, "birthDate": chart}], EXAM, NOW)


@given(st.lists(_resource, max_size=6), st.lists(_resource, max_size=6))
@settings(max_examples=150, deadline=None)
def test_another_patients_data_change_nothing(ours: list[Any], theirs: list[Any]) -> None:
    alone = read([PATIENT, *of("Patient/p1", ours)])
    strangers = [{**r, "id": f"other-{r['id']}"} for r in of("Patient/p2", theirs)]
    mixed = read([*strangers, PATIENT, *of("Patient/p1", ours), *strangers])
    assert facts(mixed) == facts(alone)


@given(st.lists(_resource, max_size=8), st.randoms(use_true_random=False))
@settings(max_examples=100, deadline=None)
def test_the_order_of_resources_does_not_matter(ours: list[Any], shuffler: random.Random) -> None:
    resources = [PATIENT, *of("Patient/p1", ours)]
    before = read(resources)
    shuffler.shuffle(resources)
    after = read(resources)
    # the answers of one earlier examination are joined in the order they come
    assert {
        (f.id, f.state, f.source, frozenset(f.answers), f.measure, f.time) for f in before.context.facts
    } == {(f.id, f.state, f.source, frozenset(f.answers), f.measure, f.time) for f in after.context.facts}


@given(st.lists(_resource, max_size=6))
@settings(max_examples=150, deadline=None)
def test_what_was_withdrawn_or_lies_ahead_is_never_present(ours: list[Any]) -> None:
    chart = read([PATIENT, *of("Patient/p1", ours)])
    by_name = {f"{r['resourceType']}/{r['id']}": r for r in of("Patient/p1", ours)}
    for fact in chart.context.facts:
        resource = by_name.get(fact.reference)
        if resource is None or fact.state not in (State.PRESENT, State.ABSENT):
            continue
        kind = resource["resourceType"]
        if kind == "Condition":
            assert resource["verificationStatus"]["coding"][0]["code"] == "confirmed"
            assert resource["clinicalStatus"]["coding"][0]["code"] == "active"
        else:
            assert resource["status"] not in ("entered-in-error", "cancelled", "registered", "not-done")
        assert not fact.time.startswith("2027")
        if kind == "Observation" and fact.reference and fact.measure is None and not resource["component"]:
            assert "dataAbsentReason" not in resource
            assert "interpretation" in resource or any(name.startswith("value") for name in resource)
