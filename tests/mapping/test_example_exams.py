"""The invented examinations in examples/ehr: one in all four intake forms, and one on a German form."""

from __future__ import annotations

import csv
import io
import json
from decimal import Decimal
from pathlib import Path

import openpyxl
import pytest

from fhirgallop.exam.catalogue import load
from fhirgallop.exam.checks import check
from fhirgallop.exam.entry import Grade, Measure
from fhirgallop.exam.exam import Exam, Party
from fhirgallop.exam.presence import Presence
from fhirgallop.intake import hl7v2, questionnaire, rest, table, workbook
from fhirgallop.intake.record import LocalRecord
from fhirgallop.mapping.apply import apply
from fhirgallop.mapping.coverage import Coverage
from fhirgallop.mapping.reading import load_map

EXAMPLES = Path(__file__).parents[2] / "examples"
EHR = EXAMPLES / "ehr"


def only(reading) -> LocalRecord:
    (record,) = reading
    assert isinstance(record, LocalRecord), record
    assert record.issues == ()
    return record


def from_json() -> LocalRecord:
    reading = rest.read_json((EHR / "fernwood-exam.json").read_bytes())
    assert reading.issues == ()
    return only(reading.records)


def from_csv() -> LocalRecord:
    return only(table.read_csv(io.BytesIO((EHR / "fernwood-exam.csv").read_bytes())))


def from_workbook() -> LocalRecord:
    """The CSV example as somebody keeps it in a spreadsheet: whole numbers as numbers, the rest as text."""
    rows = list(csv.reader((EHR / "fernwood-exam.csv").read_text("utf-8").splitlines()))
    book = openpyxl.Workbook()
    sheet = book.active
    for row in rows:
        sheet.append([int(cell) if cell.isdecimal() else cell or None for cell in row])
    file = io.BytesIO()
    book.save(file)
    return only(workbook.read_workbook(io.BytesIO(file.getvalue())))


def from_hl7() -> LocalRecord:
    reading = hl7v2.read_message((EHR / "fernwood-exam.hl7").read_bytes())
    assert reading.issues == ()
    return only(reading.records)


def from_questionnaire() -> LocalRecord:
    form = json.loads((EHR / "fernwood-form.questionnaire.json").read_bytes())
    reading = questionnaire.read_response(
        (EHR / "fernwood-exam.questionnaireresponse.json").read_bytes(), questionnaire=form
    )
    assert reading.issues == ()
    return only(reading.records)


FORMS = {
    "json": from_json,
    "csv": from_csv,
    "workbook": from_workbook,
    "hl7v2": from_hl7,
    "questionnaire": from_questionnaire,
}


@pytest.fixture(scope="module")
def fernwood():
    return load_map(EXAMPLES / "informatician" / "fernwood-heart-form.yaml")


@pytest.fixture(scope="module")
def exam(fernwood) -> Exam:
    return apply(from_json(), fernwood, load()).exam


@pytest.mark.parametrize("form", FORMS)
def test_one_examination_in_every_form_is_the_same(form, fernwood, exam):
    mapped = apply(FORMS[form](), fernwood, load())
    assert mapped.issues == ()
    assert mapped.exam == exam


def test_the_examination_contradicts_nothing(exam):
    assert check(exam, load()) == []


def test_what_the_examination_says(exam):
    said = {entry.key: entry for entry in exam.entries}
    assert exam.patient == Party("F-20417", "https://fernwood.example/patients")
    assert (exam.identifier, exam.time.start) == ("E-2026-0314-07", "2026-03-14T09:30:00+01:00")
    assert (exam.encounter.value, exam.examiner.value, exam.status) == ("V-8812", "S-31", "final")
    assert exam.notes == ("Examined in a quiet room.",)
    fourth = said["heart-sound.s4", ""]
    assert fourth.presence is Presence.PRESENT
    assert {(q.axis, q.value) for q in fourth.qualifiers} == {
        ("chamber", "left"),
        ("posture", "left-lateral"),
    }
    murmur = said["murmur.systolic", "1"]
    assert next(q.grade for q in murmur.qualifiers if q.axis == "grade") == Grade(2, 3, 6)
    assert murmur.notes == ("Best heard leaning forward.",)
    assert said["jvp.height", ""].measure == Measure(Decimal(4), "cm")
    assert said["pressure.systolic", ""].measure == Measure(Decimal(152), "mm[Hg]")
    assert said["pressure.diastolic", ""].measure == Measure(Decimal(84), "mm[Hg]")
    assert said["vital.heart-rate", ""].measure == Measure(Decimal(78), "/min")
    assert said["echo.lvef", ""].measure == Measure(Decimal(60), "%", "", Decimal(65))
    assert {key[0] for key, entry in said.items() if entry.time == "2026-03-12"} == {
        "echo.lvef",
        "echo.e-e-prime-ratio",
        "echo.la-volume-index",
        "echo.ivc-diameter",
    }
    assert {entry.time for entry in exam.entries} == {"", "2026-03-12"}
    assert said["echo.ivc-diameter", ""].measure == Measure(Decimal("1.8"), "cm", original="18 mm")
    assert said["heart-sound.pericardial-rub", ""].presence is Presence.ABSENT
    assert said["heart-sound.s3", ""].presence is Presence.ABSENT
    assert said["jvp.abdominojugular-reflux", ""].presence is Presence.NOT_EXAMINED
    assert said["vital.oxygen-saturation", ""].presence is Presence.NOT_EXAMINED


def test_local_wordings_travel_beside_the_codes(exam):
    assert exam.local_system == "https://fernwood.example/heart-form"
    said = {entry.finding: entry.said for entry in exam.entries}
    assert said["heart-sound.s4"] == "left"
    assert said["rhythm.regularity"] == "reg"
    assert said["vital.heart-rate"] == ""


def test_every_field_of_the_form_is_accounted_for(fernwood):
    record = from_csv()
    counts = Coverage(fernwood, load())
    counts.add(record, apply(record, fernwood, load()))
    assert {count.name for count in counts.fields() if count.use == "unread"} == set()
    assert {count.name for count in counts.fields() if count.use == "ignored"} == {"clerk", "billing.code"}


def test_the_questionnaire_offers_every_wording_that_the_map_knows(fernwood):
    form = json.loads((EHR / "fernwood-form.questionnaire.json").read_bytes())
    items = {item["linkId"]: item for group in form["item"] for item in group.get("item", [])}
    for line in fernwood.lines:
        boxes = [(line.field, line.choice), (line.field, line.named)]
        boxes += [(source.field, source.choice) for source in line.qualifiers]
        for field, choice in boxes:
            if choice and "answerOption" in items[field]:
                offered = {option["valueCoding"]["code"] for option in items[field]["answerOption"]}
                assert choice.meanings.keys() <= offered, field


def test_a_german_form():
    template = load_map(EXAMPLES / "informatician" / "lindental-herzbogen.yaml")
    record = only(table.read_csv(io.BytesIO((EHR / "lindental-exam.csv").read_bytes())))
    mapped = apply(record, template, load())
    assert mapped.issues == ()
    exam = mapped.exam
    assert check(exam, load()) == []
    assert (exam.identifier, exam.time.start) == ("L-0093-03.07.2026", "2026-07-03T14:05:00+02:00")
    said = {entry.finding: entry for entry in exam.entries}
    assert said["vital.temperature"].measure == Measure(Decimal("36.7"), "Cel")
    assert said["heart-sound.s3"].presence is Presence.UNCERTAIN
    assert said["heart-sound.s4"].presence is Presence.NOT_EXAMINED
    assert "murmur.systolic" not in said
    murmur = said["murmur.diastolic"]
    assert {(q.axis, q.value or str(q.grade)) for q in murmur.qualifiers} == {
        ("grade", "2/6"),
        ("timing", "early-diastolic"),
        ("shape", "decrescendo"),
        ("quality", "blowing"),
        ("site", "erb"),
        ("site", "aortic"),
    }
