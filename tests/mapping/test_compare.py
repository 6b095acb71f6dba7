"""What a changed map would change, over records, before it is published."""

from __future__ import annotations

from pathlib import Path

import pytest

from fhirgallop.api import read_records
from fhirgallop.exam import catalogue
from fhirgallop.intake.record import LocalRecord
from fhirgallop.mapping import editing
from fhirgallop.mapping.compare import Comparison
from fhirgallop.mapping.reading import read_map
from fhirgallop.mapping.template_map import TemplateMap

ROOT = Path(__file__).parents[2]
TEXT = (ROOT / "examples/informatician/fernwood-heart-form.yaml").read_text(encoding="utf-8")


def read(text: str) -> TemplateMap:
    template, issues = read_map(text)
    assert template is not None, [str(issue) for issue in issues]
    return template


@pytest.fixture(scope="module")
def records() -> list[LocalRecord]:
    found = [
        read
        for read in read_records(ROOT / "examples/ehr/fernwood-exam.json")
        if isinstance(read, LocalRecord)
    ]
    assert found
    return found * 3


def compared(old: str, new: str, records: list[LocalRecord]) -> Comparison:
    comparison = Comparison(read(old), read(new), catalogue.load())
    for record in records:
        comparison.add(record)
    return comparison


def line_of(text: str, finding: str) -> int:
    return next(at for at, one in enumerate(editing.entries(text)) if one.value.get("finding") == finding)


def test_the_same_map_changes_nothing_but_its_version_does_not_count(records: list[LocalRecord]) -> None:
    same = compared(TEXT, editing.put_part(TEXT, "version", "2026.2"), records)
    assert (same.differences(), same.touched, same.records) == ([], 0, 3)


def test_appearing_vanishing_and_changing(records: list[LocalRecord]) -> None:
    at = line_of(TEXT, "heart-sound.s4")
    without = editing.drop_entry(TEXT, at)
    gone = compared(TEXT, without, records)
    assert [(one.finding, one.change, one.count) for one in gone.differences()] == [
        ("heart-sound.s4", "vanishes", 3)
    ]
    assert gone.differences()[0].fields["heart.s4"] == 3
    assert gone.differences()[0].examples == [0, 1, 2]
    back = compared(without, TEXT, records)
    assert [(one.finding, one.change) for one in back.differences()] == [("heart-sound.s4", "appears")]

    line = editing.entries(TEXT)[at].value
    other = editing.put_entry(TEXT, {**line, "choice": dict.fromkeys(line["choice"], "absent")}, at)
    turned = compared(TEXT, other, records)
    assert [(one.finding, one.change) for one in turned.differences()] == [("heart-sound.s4", "changes")]


def test_records_that_would_be_refused_are_counted(records: list[LocalRecord]) -> None:
    at = line_of(TEXT, "general.nyha-class")
    line = editing.entries(TEXT)[at].value
    narrow = editing.put_entry(TEXT, {**line, "choice": {"none": "0"}}, at)
    comparison = compared(TEXT, narrow, records)
    assert (comparison.newly_refused, comparison.newly_coded) == (3, 0)


def test_another_identity_is_said(records: list[LocalRecord]) -> None:
    patient = {"field": "patient.number", "system": "https://other.example/patients"}
    comparison = compared(TEXT, editing.put_part(TEXT, "patient", patient, "record"), records)
    assert comparison.other_identity == 3
