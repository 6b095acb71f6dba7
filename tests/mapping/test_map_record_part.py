"""Whose examination a record is, which one, when, and how far it has got."""

from __future__ import annotations

import pytest

from fhirgallop.exam.catalogue import load
from fhirgallop.exam.exam import Party
from fhirgallop.exam.moment import Moment
from fhirgallop.intake.record import Coded, Field, Header, LocalRecord
from fhirgallop.mapping.apply import Mapped, apply
from fhirgallop.mapping.reading import read_map

PATIENTS, EXAMS = "https://fernwood.example/patients", "https://fernwood.example/examinations"
GOOD = {
    "patient": f'{{field: pid, system: "{PATIENTS}"}}',
    "identifier": f'{{field: no, system: "{EXAMS}"}}',
    "time": "{field: at}",
}
KNOWN = {"pid": "F-1", "no": "E-1", "at": "2026-03-14T09:30:00+01:00"}


def read(parts: dict[str, str], fields: dict[str, object], *, form: str = "json", **header: str) -> Mapped:
    record = "".join(f"  {key}: {text}\n" for key, text in {**GOOD, **parts}.items())
    template, faults = read_map(
        f'template-map: 1\nname: a\nversion: "1"\nrecord:\n{record}blanks: ["-"]\n'
        'lines: [{finding: heart-sound.s4, field: s4, choice: {"yes": present}}]\n'
    )
    assert template is not None, faults
    made = {
        name: Field(name, tuple(value) if isinstance(value, list) else (value,))
        for name, value in {**KNOWN, **fields}.items()
        if value is not None
    }
    return apply(LocalRecord(form, made, header=Header(**header)), template, load())


def rules(mapped: Mapped) -> list[tuple[str, str, str]]:
    return [(issue.severity, issue.rule, issue.field) for issue in mapped.issues]


def test_a_good_record():
    mapped = read({}, {})
    assert mapped.issues == ()
    assert mapped.exam.patient == Party("F-1", PATIENTS)
    assert (mapped.exam.identifier, mapped.exam.identifier_system) == ("E-1", EXAMS)
    assert mapped.exam.time == Moment("2026-03-14T09:30:00+01:00")
    assert (mapped.exam.map.name, mapped.exam.map.version) == ("a", "1")
    assert mapped.exam.status == "final"


@pytest.mark.parametrize(
    ("field", "rule"),
    [("pid", "map-patient-missing"), ("no", "map-identifier-missing"), ("at", "map-time-missing")],
)
@pytest.mark.parametrize("value", [None, "", " ", "-"])
def test_patient_number_and_time_must_be_there(field, rule, value):
    mapped = read({}, {field: value})
    assert rules(mapped) == [("error", rule, field)]
    assert mapped.exam is None


def test_everything_missing_is_told_at_once():
    assert len(rules(read({}, {"pid": "", "no": "", "at": ""}))) == 3


@pytest.mark.parametrize("field", ["pid", "no", "at"])
def test_several_values_where_one_is_needed(field):
    assert ("error", "map-several-values", field) in rules(read({}, {field: ["1", "2"]}))


@pytest.mark.parametrize("field", ["pid", "no"])
@pytest.mark.parametrize("value", ["a\x07b", "x" * 256, "\ud800"])
def test_numbers_that_no_system_can_hold(field, value):
    mapped = read({}, {field: value})
    assert rules(mapped) == [("error", "map-number-of-record", field)]
    assert mapped.exam is None


def test_a_fhir_id():
    by_id = {"patient": "{field: pid, fhir-id: true}"}
    assert read(by_id, {"pid": "abc-1.2"}).exam.patient == Party("abc-1.2", "", is_fhir_id=True)
    assert rules(read(by_id, {"pid": "no id"})) == [("error", "map-number-of-record", "pid")]


def test_the_header_stands_in_for_fields_that_are_missing():
    parts = {
        "encounter": '{field: visit, system: "urn:v"}',
        "examiner": '{field: who, system: "urn:s"}',
        "status": "{field: state, choice: {signed: final}}",
    }
    header = {
        "patient": "H-1",
        "identifier": "H-2",
        "time": "2026-03-15",
        "encounter": "H-3",
        "examiner": "H-4",
        "status": "preliminary",
    }
    mapped = read(parts, {"pid": None, "no": None, "at": None}, form="oru", **header)
    exam = mapped.exam
    assert mapped.issues == ()
    assert (exam.patient, exam.encounter, exam.examiner) == (
        Party("H-1", PATIENTS),
        Party("H-3", "urn:v"),
        Party("H-4", "urn:s"),
    )
    assert (exam.identifier, exam.time.start, exam.status) == ("H-2", "2026-03-15", "preliminary")
    fields = {"visit": "V", "who": "W", "state": "signed"}
    exam = read(parts, fields, **header).exam
    assert (exam.patient.value, exam.encounter.value, exam.examiner.value) == ("F-1", "V", "W")
    assert (exam.identifier, exam.status) == ("E-1", "final")


def test_a_map_that_names_no_field_reads_the_header():
    parts = {"patient": '{system: "urn:p"}', "identifier": '{system: "urn:e"}', "time": '{zone: "+01:00"}'}
    fields = dict.fromkeys(KNOWN)
    header = {"patient": "Patient/p1", "identifier": "7", "time": "2026-03-14T09:30"}
    exam = read(parts, fields, **header).exam
    assert exam.patient == Party("p1", is_fhir_id=True)
    assert exam.time.start == "2026-03-14T09:30:00+01:00"
    assert {rule for _, rule, _ in rules(read(parts, fields))} == {
        "map-patient-missing",
        "map-identifier-missing",
        "map-time-missing",
    }


def test_a_header_that_the_map_does_not_read_is_told():
    mapped = read({}, {}, encounter="V-1", examiner="S-1")
    assert [rule for _, rule, _ in rules(mapped)] == ["map-header-unread"] * 2
    assert (mapped.exam.encounter, mapped.exam.examiner) == (None, None)


def test_encounter_and_examiner_may_be_blank():
    mapped = read({"encounter": '{field: v, system: "urn:v"}'}, {"v": "-"})
    assert mapped.issues == ()
    assert mapped.exam.encounter is None


def test_an_identifier_of_several_fields():
    parts = {"identifier": f'{{fields: [pid, day], system: "{EXAMS}"}}'}
    assert read(parts, {"day": "2026-03-14", "no": None}).exam.identifier == "F-1-2026-03-14"
    assert rules(read(parts, {"day": "", "no": None})) == [("error", "map-identifier-missing", "pid")]


@pytest.mark.parametrize(
    ("time", "fields", "expected"),
    [
        ("{field: at}", {"at": "2026-03-14"}, "2026-03-14"),
        ("{field: at}", {"at": "2026-03"}, "2026-03"),
        ("{field: at}", {"at": "2026-03-14 09:30Z"}, "2026-03-14T09:30:00Z"),
        ('{field: at, zone: "+01:00"}', {"at": "2026-03-14T09:30"}, "2026-03-14T09:30:00+01:00"),
        ('{field: at, zone: "+01:00"}', {"at": "2026-03-14T09:30-05:00"}, "2026-03-14T09:30:00-05:00"),
        ("{field: at, zone: Z}", {"at": "2026-03-14T09:30:15.250"}, "2026-03-14T09:30:15.250Z"),
        ("{field: at, zone: Europe/Vienna}", {"at": "2026-03-14T09:30"}, "2026-03-14T09:30:00+01:00"),
        ("{field: at, zone: Europe/Vienna}", {"at": "2026-07-14T09:30"}, "2026-07-14T09:30:00+02:00"),
        ("{field: at, zone: America/St_Johns}", {"at": "2026-01-14T09:30"}, "2026-01-14T09:30:00-03:30"),
        ("{field: at, zone: Europe/Vienna}", {"at": "2026-07-14"}, "2026-07-14"),
        ("{field: at, format: DD.MM.YYYY}", {"at": "4.3.2026"}, "2026-03-04"),
        ("{field: at, format: DD.MM.YYYY, zone: Z}", {"at": "04.03.2026 9:05"}, "2026-03-04T09:05:00Z"),
        (
            '{field: at, format: "MM/DD/YYYY hh:mm:ss", zone: Z}',
            {"at": "03/04/2026 09:05:07"},
            "2026-03-04T09:05:07Z",
        ),
        ("{field: at, format: YYYYMMDD}", {"at": "20260304"}, "2026-03-04"),
        ("{field: at, format: MM/YYYY}", {"at": "03/2026"}, "2026-03"),
        ("{fields: [day, clock], zone: Z}", {"day": "2026-03-04", "clock": "09:05"}, "2026-03-04T09:05:00Z"),
        ("{constant: 2015-06}", {}, "2015-06"),
    ],
)
def test_times(time, fields, expected):
    mapped = read({"time": time}, {"at": None, **fields})
    assert mapped.issues == ()
    assert mapped.exam.time == Moment(expected)


@pytest.mark.parametrize(
    ("time", "value", "rule", "says"),
    [
        ("{field: at}", "2026-03-14T09:30", "map-time-without-zone", "name the zone in the map"),
        ("{field: at}", "2026-02-30", "map-time-unreadable", "no such day"),
        ("{field: at}", "14.03.2026", "map-time-unreadable", "ISO 8601"),
        ("{field: at}", "yesterday", "map-time-unreadable", "ISO 8601"),
        ("{field: at, format: DD.MM.YYYY}", "2026-03-14", "map-time-unreadable", "form that the map states"),
        ("{field: at, format: DD.MM.YYYY}", "31.02.2026", "map-time-unreadable", "no such day"),
        ("{field: at, format: DD.MM.YYYY}", "14.03.2026 09:30", "map-time-without-zone", "zone"),
        (
            "{field: at, format: DD.MM.YYYY, zone: Z}",
            "14.03.2026 29:30",
            "map-time-unreadable",
            "no such time",
        ),
        (
            "{field: at, zone: Europe/Vienna}",
            "2026-10-25T02:30",
            "map-time-unreadable",
            "clocks were changed",
        ),
        (
            "{field: at, zone: Europe/Vienna}",
            "2026-03-29T02:30",
            "map-time-unreadable",
            "clocks were changed",
        ),
        ("{field: at, zone: Europe/Vienna}", "2026-03-29T02:75", "map-time-unreadable", "no such time"),
    ],
)
def test_times_that_cannot_be_used(time, value, rule, says):
    mapped = read({"time": time}, {"at": value})
    assert rules(mapped) == [("error", rule, "at")]
    assert says in mapped.issues[0].text
    assert mapped.exam is None


def test_periods():
    parts = {"time": "{field: at, periods: {CC1: [2014-07, 2014-08], CC2: [2015, 2015]}}"}
    assert read(parts, {"at": "cc1"}).exam.time == Moment("2014-07", "2014-08")
    mapped = read(parts, {"at": "CC3"})
    assert rules(mapped) == [("error", "map-value-unknown", "at")]
    assert [(u.field, u.value) for u in mapped.unknown] == [("at", "CC3")]
    assert mapped.exam is None


@pytest.mark.parametrize(
    ("value", "header", "status", "found"),
    [
        ("signed", "", "final", []),
        ("SIGNED ", "preliminary", "final", []),
        (Coded("s", "signed"), "", "final", []),
        ("", "amended", "amended", []),
        ("", "", "preliminary", [("warning", "map-status-blank", "state")]),
        ("odd", "", "preliminary", [("error", "map-value-unknown", "state")]),
    ],
)
def test_status(value, header, status, found):
    mapped = read({"status": "{field: state, choice: {signed: final}}"}, {"state": value}, status=header)
    assert mapped.exam.status == status
    assert rules(mapped) == found


@pytest.mark.parametrize("header", ["cancelled", "not-asked"])
def test_an_examination_that_did_not_take_place(header):
    assert ("error", "map-exam-cancelled", "") in rules(read({}, {}, status=header))


@pytest.mark.parametrize("status", ["preliminary", "corrected", "amended"])
def test_an_examination_is_no_further_than_its_entries(status):
    template, _ = read_map(
        'template-map: 1\nname: a\nversion: "1"\nrecord:\n'
        + "".join(f"  {key}: {text}\n" for key, text in GOOD.items())
        + 'lines: [{finding: heart-sound.s4, field: s4, choice: {"yes": present}}]\n'
    )
    fields = {name: Field(name, (value,)) for name, value in KNOWN.items()}
    fields["s4"] = Field("s4", ("yes",), status=status)
    mapped = apply(LocalRecord("oru", fields, header=Header(status="final")), template, load())
    assert mapped.exam.status == status
    assert rules(mapped) == [("information", "map-entry-status", "s4")]


def test_issues_name_source_and_line():
    template, _ = read_map(
        'template-map: 1\nname: a\nversion: "1"\nrecord:\n'
        + "".join(f"  {key}: {text}\n" for key, text in GOOD.items())
        + 'lines: [{finding: heart-sound.s4, field: s4, choice: {"yes": present}}]\n'
    )
    fields = {"pid": Field("pid", ("1",), 7), "s4": Field("s4", ("odd",), 9)}
    mapped = apply(LocalRecord("table", fields, source="exams.csv", line=5), template, load())
    places = {issue.field: (issue.source, issue.line) for issue in mapped.issues}
    assert places["s4"] == ("exams.csv", 9)
    assert places["no"] == ("exams.csv", 5)
