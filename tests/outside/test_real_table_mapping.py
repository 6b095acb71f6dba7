"""The published table of 942 heart examinations, read by the map in examples/informatician.

Expected counts: CirCor DigiScope 2022, training_data.csv (PhysioNet, version 1.0.3), each column counted by
the standard library's CSV reader alone. The scales of the grades (of six in systole, of four in diastole) are
written in the table.
"""

from __future__ import annotations

import csv
from collections import Counter
from pathlib import Path

import pytest

from fhirgallop.exam.catalogue import load
from fhirgallop.exam.checks import check
from fhirgallop.exam.presence import Presence
from fhirgallop.intake.record import Field, LocalRecord
from fhirgallop.mapping.apply import Mapped, apply
from fhirgallop.mapping.coverage import Coverage
from fhirgallop.mapping.reading import load_map

ROOT = Path(__file__).parents[2]
TABLE = ROOT.parent / "shared" / "data" / "circor-2022" / "training_data.csv"
MAP = ROOT / "examples" / "informatician" / "circor-2022.yaml"

pytestmark = pytest.mark.skipif(
    not TABLE.exists(), reason="the published table is not part of this project and does not lie beside it"
)


def records() -> list[LocalRecord]:
    with TABLE.open(encoding="utf-8-sig", newline="") as file:
        return [
            LocalRecord(
                "table",
                {name: Field(name, (cell,) if cell else (), line) for name, cell in row.items()},
                source="training_data.csv",
                line=line,
            )
            for line, row in enumerate(csv.DictReader(file), start=2)
        ]


@pytest.fixture(scope="module")
def results() -> list[Mapped]:
    template = load_map(MAP)
    return [apply(record, template, load()) for record in records()]


def entries(results: list[Mapped], finding: str):
    return [entry for mapped in results for entry in mapped.exam.entries if entry.finding == finding]


def said(results: list[Mapped], finding: str, axis: str) -> Counter:
    return Counter(
        str(q.grade) if q.grade else q.value
        for entry in entries(results, finding)
        for q in entry.qualifiers
        if q.axis == axis
    )


def test_every_row_is_an_examination_without_issues(results):
    assert len(results) == 942
    assert [mapped.issues for mapped in results if mapped.issues] == []
    assert [mapped for mapped in results if mapped.unread or mapped.unknown] == []
    assert [issue for mapped in results for issue in check(mapped.exam, load()) if issue.is_error] == []


def test_presence_of_a_murmur(results):
    assert Counter(entry.presence for entry in entries(results, "murmur")) == {
        Presence.PRESENT: 179,
        Presence.ABSENT: 695,
        Presence.NOT_EXAMINABLE: 68,
    }


def test_sites_where_a_murmur_was_heard(results):
    assert said(results, "murmur", "site") == {
        "mitral": 140, "tricuspid": 124, "pulmonary": 120, "aortic": 108, "other": 2,
    }  # fmt: skip
    assert said(results, "murmur", "loudest-site") == {
        "pulmonary": 62, "tricuspid": 56, "mitral": 42, "aortic": 19,
    }  # fmt: skip


def test_systolic_attributes(results):
    assert len(entries(results, "murmur.systolic")) == 178
    assert said(results, "murmur.systolic", "timing") == {
        "holosystolic": 101, "early-systolic": 59, "mid-systolic": 17, "late-systolic": 1,
    }  # fmt: skip
    assert said(results, "murmur.systolic", "grade") == {"1/6": 104, "2/6": 28, "3/6": 46}
    assert said(results, "murmur.systolic", "shape") == {
        "plateau": 111, "decrescendo": 34, "crescendo-decrescendo": 31, "crescendo": 2,
    }  # fmt: skip


def test_diastolic_attributes_are_graded_of_four(results):
    assert len(entries(results, "murmur.diastolic")) == 5
    assert said(results, "murmur.diastolic", "grade") == {"1/4": 3, "2/4": 1, "3/4": 1}


def test_numbers_and_campaigns(results):
    assert len(entries(results, "vital.height")) == 942 - 116
    assert len(entries(results, "vital.weight")) == 942 - 105
    assert Counter((m.exam.time.start, m.exam.time.end) for m in results) == {
        ("2014-07", "2014-08"): 385,
        ("2015-06", "2015-07"): 557,
    }
    assert Counter(e.answers[0] for e in entries(results, "exam.interpretation")) == {
        "normal": 486,
        "abnormal": 456,
    }


def test_every_column_is_accounted_for(results):
    template = load_map(MAP)
    coverage = Coverage(template, load())
    for record, mapped in zip(records(), results, strict=True):
        coverage.add(record, mapped)
    assert coverage.records == coverage.coded == 942
    uses = Counter(count.use for count in coverage.fields())
    assert uses == {"read": 20, "ignored": 3}
    assert coverage.issues() == []
