"""A blood-pressure box with one number of two: the other goes out as a reason why it is absent."""

from __future__ import annotations

import pytest

from fhirgallop.intake.record import Field, LocalRecord
from fhirgallop.mapping.reading import read_map
from fhirgallop.pipeline import process

MAP = """\
template-map: 1
name: pressure
version: "1"
blank-means: {means}
record:
  patient: {{field: pid, system: "https://fernwood.example/patients"}}
  identifier: {{field: no, system: "https://fernwood.example/examinations"}}
  time: {{field: at}}
lines:
  - {{finding: pressure.systolic, field: bp, number: {{unit: "mm[Hg]", split: "/", part: 1}}}}
  - {{finding: pressure.diastolic, field: bp, number: {{unit: "mm[Hg]", split: "/", part: 2}}}}
"""


@pytest.mark.parametrize(
    ("means", "reason"), [("not-recorded", "unknown"), ("not-examined", "not-performed")]
)
@pytest.mark.parametrize(
    ("written", "given", "blank"),
    [("120/-", "8480-6", "8462-4"), ("120/", "8480-6", "8462-4"), ("/80", "8462-4", "8480-6")],
)
def test_the_blank_part_is_a_component_with_its_reason(moment, means, reason, written, given, blank):
    """LOINC 8480-6 systolic, 8462-4 diastolic; data-absent-reason codes of FHIR R4."""
    template, issues = read_map(MAP.format(means=means))
    assert template is not None, issues
    cells = {"pid": "F-1", "no": "E-1", "at": "2026-03-14T09:30:00+01:00", "bp": written}
    record = LocalRecord("json", {name: Field(name, (cell,)) for name, cell in cells.items()})
    result = process(record, template, recorded=moment)
    assert result.ok, [str(issue) for issue in result.issues]
    (panel,) = (e["resource"] for e in result.bundle["entry"] if "component" in e["resource"])
    parts = {coding["code"]: part for part in panel["component"] for coding in part["code"]["coding"]}
    assert "valueQuantity" in parts[given]
    assert "valueQuantity" not in parts[blank]
    assert parts[blank]["dataAbsentReason"]["coding"][0]["code"] == reason
