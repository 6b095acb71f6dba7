"""One examination written in all four intake forms gives the same Observations but for provenance."""

from __future__ import annotations

import csv
import json

import openpyxl
import pytest

from fhirgallop.intake.detect import open_records
from fhirgallop.mapping.reading import load_map
from fhirgallop.pipeline import process

FILES = {
    "json": "fernwood-exam.json",
    "csv": "fernwood-exam.csv",
    "hl7": "fernwood-exam.hl7",
    "questionnaire-response": "fernwood-exam.questionnaireresponse.json",
}


@pytest.fixture(scope="module")
def template(root):
    return load_map(root / "examples" / "informatician" / "fernwood-heart-form.yaml")


@pytest.fixture
def coded(root, template, moment):
    def run(path):
        (record,) = open_records(path)
        result = process(record, template, recorded=moment)
        assert result.ok, [str(issue) for issue in result.issues]
        return [entry["resource"] for entry in result.bundle["entry"][:-1]], result.bundle["entry"][-1][
            "resource"
        ]

    return lambda name: run(name if not isinstance(name, str) else root / "examples" / "ehr" / name)


@pytest.mark.parametrize("form", ["csv", "hl7", "questionnaire-response"])
def test_the_same_resources_whatever_the_form(coded, form):
    resources, trail = coded(FILES[form])
    as_json, json_trail = coded(FILES["json"])
    assert resources == as_json
    assert trail != json_trail
    assert trail["entity"][0]["what"]["identifier"] == json_trail["entity"][0]["what"]["identifier"]


def test_a_spreadsheet_is_a_table_too(coded, root, tmp_path):
    lines = (root / "examples" / "ehr" / FILES["csv"]).read_text(encoding="utf-8")

    book = openpyxl.Workbook()
    for row in csv.reader(lines.splitlines()):
        book.active.append(row)
    path = tmp_path / "fernwood-exam.xlsx"
    book.save(path)
    assert coded(path)[0] == coded(FILES["json"])[0]


def test_every_field_is_read_or_ignored(root, template, moment):
    (record,) = open_records(root / "examples" / "ehr" / FILES["json"])
    result = process(record, template, recorded=moment)
    assert result.unread == ()
    assert result.unknown == ()
    assert json.dumps([str(i) for i in result.issues if i.severity != "information"]) == "[]"
