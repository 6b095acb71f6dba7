"""The fast and the thorough pass: whatever the fast one settles, the thorough one says the same of."""

from __future__ import annotations

from collections.abc import Callable
from copy import deepcopy
from datetime import UTC, datetime
from decimal import Decimal
from functools import cache
from pathlib import Path
from typing import Any

import orjson
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from jsonschema_rs import Draft202012Validator

from fhirgallop.conformance import fast, fast_forms, fast_profiles
from fhirgallop.conformance.fast_schema import SchemaBuilder
from fhirgallop.conformance.registry import Registry, own_definitions, registry
from fhirgallop.conformance.source import read
from fhirgallop.conformance.validator import thorough, validate
from fhirgallop.conformance.vital_signs import PROFILES
from fhirgallop.exam.entry import Entry, Grade, Measure, Qualifier
from fhirgallop.exam.exam import Exam, MapVersion, Party
from fhirgallop.exam.moment import Moment
from fhirgallop.exam.presence import Presence
from fhirgallop.observations.bundle import encode
from fhirgallop.outcome import ordered

EDITIONS = ("R4", "R4B", "R5")
SD = "http://hl7.org/fhir/StructureDefinition/"
LOINC = "http://loinc.org"
UCUM = "http://unitsofmeasure.org"
DIV = '<div xmlns="http://www.w3.org/1999/xhtml">{}</div>'
OBSERVATION: dict[str, Any] = {
    "resourceType": "Observation",
    "id": "a",
    "meta": {"lastUpdated": "2026-03-04T10:00:00Z", "tag": [{"system": "https://x.example", "code": "t"}]},
    "text": {"status": "generated", "div": DIV.format("<p>Heart rate</p>")},
    "identifier": [{"system": "https://x.example", "value": "1", "period": {"start": "2026"}}],
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
    "code": {"coding": [{"system": LOINC, "code": "8867-4", "display": "Heart rate"}], "text": "Heart rate"},
    "subject": {"reference": "Patient/1"},
    "effectiveDateTime": "2026-03-04",
    "issued": "2026-03-04T10:00:00+01:00",
    "performer": [{"reference": "Practitioner/2", "display": "X"}],
    "valueQuantity": {"value": 72, "unit": "/min", "system": UCUM, "code": "/min"},
    "interpretation": [
        {
            "coding": [
                {"system": "http://terminology.hl7.org/CodeSystem/v3-ObservationInterpretation", "code": "N"}
            ]
        }
    ],
    "referenceRange": [{"low": {"value": 60, "unit": "/min"}, "text": "adults"}],
}
FINDING: dict[str, Any] = {
    "resourceType": "Observation",
    "text": {"status": "generated", "div": DIV.format("<p>Murmur &gt; 3</p><ul><li>loud</li></ul>")},
    "identifier": [{"system": "https://x.example", "value": "2", "use": "official"}],
    "status": "final",
    "code": {"coding": [{"system": "http://snomed.info/sct", "code": "88610006"}]},
    "subject": {"identifier": {"system": "https://x.example", "value": "p"}, "type": "Patient"},
    "effectivePeriod": {"start": "2026-03-04T10:00:00Z", "end": "2026-03-04T10:10:00Z"},
    "performer": [{"type": "Practitioner", "identifier": {"value": "d"}}],
    "valueRange": {"low": {"value": 1, "unit": "cm"}, "high": {"value": 2.5, "unit": "cm"}},
    "component": [
        {
            "code": {"coding": [{"system": "http://snomed.info/sct", "code": "1"}]},
            "valueQuantity": {"value": 3},
        },
        {"code": {"text": "pitch"}, "valueString": "low"},
    ],
}
URN = "urn:uuid:0f8fad5b-d9cb-469f-a165-70867728950{}"


def _bundle() -> dict[str, Any]:
    patient = {"resourceType": "Patient", "active": True, "text": deepcopy(OBSERVATION["text"])}
    other = deepcopy(OBSERVATION)
    other["code"] = {"text": "finding"}
    other["subject"] = {"reference": URN.format("0")}
    del other["valueQuantity"]
    other["hasMember"] = [{"reference": URN.format("1")}]
    return {
        "resourceType": "Bundle",
        "type": "transaction",
        "entry": [
            {"fullUrl": URN.format(i), "resource": r, "request": {"method": "POST", "url": r["resourceType"]}}
            for i, r in enumerate((patient, deepcopy(OBSERVATION), other))
        ],
    }


def _ours(edition: str) -> dict[str, Any]:
    """A small examination as we emit it: findings, a blood pressure, panel, report and provenance."""
    exam = Exam(
        Party("P1", "https://fernwood.example/patients"),
        "E1",
        "https://fernwood.example/exams",
        Moment("2026-11-30T09:30:00+01:00"),
        (
            Entry("heart-sound.s3", Presence.ABSENT),
            Entry("murmur.systolic", qualifiers=(Qualifier("grade", grade=Grade(2, 3, 6)),)),
            Entry("pressure.systolic", measure=Measure(Decimal(152), "mm[Hg]")),
            Entry("pressure.diastolic", measure=Measure(Decimal("84.0"), "mm[Hg]")),
            Entry("jvp.height", measure=Measure(Decimal("4.0"), "cm")),
        ),
        examiner=Party("dr7", "https://fernwood.example/staff"),
        map=MapVersion("fernwood", "1"),
    )
    return encode(exam, form="json", recorded=datetime(2026, 12, 1, tzinfo=UTC), edition=edition)


def _agrees(resource: Any, known: Registry) -> bool:
    """Whether the fast pass settled it; then the verdicts must be equal."""
    found = fast.settle(resource, known)
    if found is None:
        return False
    assert ordered(found) == thorough(read(resource), known)
    return True


@pytest.mark.parametrize("edition", EDITIONS)
def test_the_plain_resources_are_settled(edition: str) -> None:
    assert _agrees(deepcopy(OBSERVATION), registry(edition))
    assert _agrees(deepcopy(FINDING), registry(edition))
    assert _agrees(_bundle(), registry(edition))
    without = deepcopy(OBSERVATION)
    del without["text"]
    assert _agrees(without, registry(edition))
    assert [i.rule for i in validate(without, edition)] == ["dom-6"]


@pytest.mark.parametrize("edition", EDITIONS)
def test_what_we_emit_is_settled(edition: str) -> None:
    bundle = _ours(edition)
    assert _agrees(bundle, registry(edition))
    for entry in bundle["entry"]:
        assert _agrees(entry["resource"], registry(edition)), entry["resource"]["resourceType"]


@pytest.mark.parametrize("edition", EDITIONS)
@pytest.mark.parametrize(
    "period",
    [
        {"start": "2015"},
        {"end": "2015-06"},
        {"start": "2015", "end": "2015"},
        {"start": "2015-06", "end": "2015-07"},
        {"start": "2015-06-30", "end": "2015-07-01"},
        {"start": "2016-12-31T23:59:60Z", "end": "2017-01-01T00:00:00Z"},
        {"start": "2024-02-29T10:00:00.5+01:00", "end": "2024-02-29T10:00:00.6+01:00"},
    ],
)
def test_periods_of_one_form_are_settled(edition: str, period: dict[str, str]) -> None:
    for resource in (OBSERVATION, FINDING):
        timed = {k: v for k, v in resource.items() if not k.startswith("effective")}
        assert _agrees({**timed, "effectivePeriod": period}, registry(edition))


@pytest.mark.parametrize("edition", EDITIONS)
def test_periods_out_of_order_or_of_two_forms_are_not(edition: str) -> None:
    for start, end in (
        ("2015-07", "2015-06"),
        ("2015", "2015-06"),
        ("2015-06-01T10:00:00Z", "2015-06-01T10:00:00+01:00"),
        ("2015-06-01T10:00:00+02:00", "2015-06-01T10:00:00+01:00"),
    ):
        assert not _agrees({**FINDING, "effectivePeriod": {"start": start, "end": end}}, registry(edition))


@pytest.mark.parametrize("edition", EDITIONS)
def test_every_vital_sign_and_every_profile_of_ours_has_a_form(edition: str) -> None:
    known = registry(edition)
    for name in PROFILES.values():
        assert fast_forms.form(known, ("Observation", (), (SD + name,))) is not None, name
    for url, definition in own_definitions().structures.items():
        assert fast_forms.form(known, (definition["type"], (url,), ())) is not None, url


@pytest.mark.parametrize("edition", EDITIONS)
def test_every_form_of_a_resource_type_compiles(edition: str) -> None:
    known = registry(edition)
    formed = [kind for kind in known.edition.resources if fast_forms.form(known, (kind, (), ())) is not None]
    assert {"Observation", "DiagnosticReport", "Patient", "Provenance", "Encounter"} <= set(formed)


SCALARS: list[Any] = [
    None,
    True,
    0,
    1,
    1.0,
    -1,
    2**31,
    1e300,
    0.1,
    "",
    " ",
    "x",
    "a b",
    "2026",
    "2026-02-29",
    "2026-03-04T10:00:00Z",
    "2026-03-04T10:00:00",
    "Patient/1",
    "Medication/1",
    "#p",
    URN.format("0"),
    URN.format("9"),
    "final",
    "N",
    LOINC,
    "\x07",
    "é",
    "8867-4",
    "29463-7",
    "/min",
    "kg",
    [],
    {},
    [None],
    ["x"],
    {"id": "x"},
    {"text": "x"},
    {"value": 1},
    {"extension": [{"url": "https://x.example", "valueCode": "a"}]},
    DIV.format(" "),
    DIV.format("<p>x</p>"),
    {"coding": [{"system": "http://snomed.info/sct", "code": "88610006"}]},
    {"low": {"value": 3}, "high": {"value": 2}},
    {"start": "2026-03-05", "end": "2026-03-04"},
    {"start": "2026-03-04", "end": "2026-03-04"},
    "Observation?identifier=1",
    "88610006",
    DIV.format("<script>x</script>"),
    {"reference": "Patient/1"},
    {"reference": URN.format("0")},
    ("x",),
]
KEYS = [
    "valueString",
    "valueInteger",
    "valueBoolean",
    "valueCodeableConcept",
    "dataAbsentReason",
    "component",
    "bodySite",
    "bodyStructure",
    "hasMember",
    "encounter",
    "note",
    "method",
    "extension",
    "contained",
    "language",
    "id",
    "period",
    "end",
    "comparator",
    "_status",
    "code",
    "system",
    "type",
    "profile",
    "high",
    "assigner",
    "value",
    "unknown",
    "url",
    "fullUrl",
    "request",
    "resource",
    "effectivePeriod",
    "specimen",
    "derivedFrom",
    "versionId",
    "identifier",
    "text",
    "low",
    "start",
    "coding",
    "reference",
    "ifNoneExist",
]


def _places(value: Any, found: list[tuple[Any, Any]]) -> list[tuple[Any, Any]]:
    for key, inner in list(value.items() if isinstance(value, dict) else enumerate(value)):
        found.append((value, key))
        if isinstance(inner, (dict, list)):
            _places(inner, found)
    return found


def _ordinary() -> list[dict[str, Any]]:
    own = [_ours(edition) for edition in EDITIONS]
    single = {e["resource"]["meta"]["profile"][0]: e["resource"] for e in own[0]["entry"]}
    return [OBSERVATION, FINDING, _bundle(), *own, *single.values()]


ORDINARY = _ordinary()


@st.composite
def changed(draw: st.DrawFn) -> Any:
    """A plain resource or Bundle with one to three changes at any place."""
    resource = deepcopy(draw(st.sampled_from(ORDINARY)))
    for _ in range(draw(st.integers(1, 3))):
        places = _places(resource, [])
        owner, key = draw(st.sampled_from(places))
        kind = draw(st.sampled_from(["set", "drop", "add", "double", "plain"]))
        scalar = deepcopy(draw(st.sampled_from(SCALARS)))
        if kind == "set":
            owner[key] = scalar
        elif kind == "drop":
            del owner[key]
        elif kind == "add" and isinstance(owner, dict):
            owner[draw(st.sampled_from(KEYS))] = scalar
        elif kind == "double" and isinstance(owner, list):
            owner.append(deepcopy(owner[key]))
        elif isinstance(owner, dict):
            owner.pop("valueQuantity", None)
            owner[draw(st.sampled_from(KEYS))] = scalar
    return resource


@pytest.mark.parametrize("edition", EDITIONS)
@given(resource=changed())
@settings(max_examples=400, deadline=None, suppress_health_check=[HealthCheck.too_slow])
def test_both_passes_give_the_same_verdict(edition: str, resource: Any) -> None:
    known = registry(edition)
    _agrees(resource, known)
    if isinstance(resource, dict):
        issues = validate(resource, edition)
        assert all(issue.text.endswith(".") and issue.rule for issue in issues)


@given(resource=changed())
@settings(max_examples=100, deadline=None, suppress_health_check=[HealthCheck.too_slow])
def test_the_verdict_is_the_same_from_text(resource: Any) -> None:
    text = orjson.dumps(resource, default=float)
    parsed = [(i.severity, i.rule, i.expression) for i in validate(orjson.loads(text))]
    written = [(i.severity, i.rule, i.expression) for i in validate(text)]
    assert sorted(parsed) == sorted(written)


FORMS: list[tuple[tuple[str, ...], tuple[str, ...]]] = [
    *(((), (SD + name,)) for name in ("bp", "heartrate", "bodyheight")),
    *(((url,), (SD + "bp",)) for url in own_definitions().structures if url.endswith("vital-sign")),
    *(((url,), ()) for url, d in own_definitions().structures.items() if d["type"] == "Observation"),
]


@pytest.mark.parametrize("edition", EDITIONS)
@given(data=st.data())
@settings(max_examples=300, deadline=None, suppress_health_check=[HealthCheck.too_slow])
def test_a_tidied_schema_says_the_same(edition: str, data: st.DataObject) -> None:
    resource = data.draw(changed())
    declared, implied = data.draw(st.sampled_from(FORMS))
    plain, tidied = _both(registry(edition), declared, implied)
    for part in [e.get("resource") for e in resource["entry"]] if _has_entries(resource) else [resource]:
        try:
            wanted = plain.is_valid(part)
        except ValueError:  # no JSON
            continue
        assert tidied.is_valid(part) == wanted


def _has_entries(resource: Any) -> bool:
    entries = resource.get("entry") if isinstance(resource, dict) else None
    return isinstance(entries, list) and all(isinstance(e, dict) for e in entries)


@cache
def _both(
    known: Registry, declared: tuple[str, ...], implied: tuple[str, ...]
) -> tuple[Draft202012Validator, Draft202012Validator]:
    """The form of an Observation as it was written, and tidied."""
    builder = SchemaBuilder(known)
    form = fast_profiles.form(builder, "Observation", declared, implied)
    assert form is not None
    found = fast_forms.form(known, ("Observation", declared, implied))
    assert found is not None
    return fast_forms._compiled({**form.schema, "$defs": builder.definitions}), found[1]


SAMPLES = sorted((Path(__file__).parent / "published").glob("*.json"))


@pytest.mark.parametrize("path", SAMPLES, ids=lambda p: p.stem)
def test_both_passes_on_published_examples(path: Path, observation: dict[str, Any]) -> None:
    edition = path.stem.partition("-")[0]
    resource = orjson.loads(path.read_bytes())
    _agrees(resource, registry(edition))
    resource.pop("text", None)
    _agrees(resource, registry(edition))


def test_whole_numbers_written_with_a_point_are_not_let_through(errors: Callable[..., Any]) -> None:
    resource = {**OBSERVATION, "code": {"text": "beats"}, "valueInteger": 1.0}
    del resource["valueQuantity"]
    assert errors(resource) == [("primitive-type", "Observation.value.ofType(integer)")]
    assert errors({**resource, "valueInteger": 1}) == []
