"""The moment of conversion is handed in, and the examination's date is held against it."""

from __future__ import annotations

from datetime import datetime, timedelta

from fhirgallop.intake.detect import open_records
from fhirgallop.mapping.reading import load_map
from fhirgallop.pipeline import process


def test_a_date_after_the_conversion_is_a_warning_and_does_not_block(root):
    template = load_map(root / "examples" / "informatician" / "fernwood-heart-form.yaml")
    (record,) = open_records(root / "examples" / "ehr" / "fernwood-exam.json")
    examined = datetime.fromisoformat("2026-03-14T09:30:00+01:00")
    for before, found in ((timedelta(days=2), ["exam-in-the-future"]), (timedelta(hours=23), [])):
        result = process(record, template, recorded=examined - before)
        assert result.ok
        assert [issue.rule for issue in result.issues if issue.severity == "warning"] == found
