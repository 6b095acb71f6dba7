"""OBX-5 by the type of OBX-2, from the cases beside."""

from __future__ import annotations

from pathlib import Path

import pytest
from ruamel.yaml import YAML

from fhirgallop.intake.hl7v2 import read_message
from fhirgallop.intake.record import Amount, Coded, Span

CASES = YAML(typ="safe").load(
    (Path(__file__).parent.parent / "cases" / "intake" / "hl7_values.yaml").read_text(encoding="utf-8")
)


def told(value):
    match value:
        case Amount(number, unit, comparator):
            return f"Amount {comparator}{number} {unit}".strip()
        case Span(low, high, unit):
            return f"Span {low} {high} {unit}".strip()
        case Coded(code, display, system):
            return f"Coded {code}|{display}|{system}"
    return f"{type(value).__name__} {value}"


@pytest.mark.parametrize("case", CASES, ids=lambda case: f"{case['type']} {case['raw']}")
def test_values_by_type(case):
    message = (
        "MSH|^~\\&|||||20260314||ORU^R01|M1|P|2.5.1||||||UNICODE UTF-8\r"
        f"OBR|1||F1|HEART|||20260314{'|' * 18}F\r"
        f"OBX|1|{case['type']}|X||{case['raw']}|{case['unit']}|||||F\r"
    )
    reading = read_message(message.encode())
    (record,) = reading.records
    assert [told(value) for value in record.fields["X"].values] == case["values"]
    assert [issue.rule for issue in record.issues] == case.get("rules", [])
    for issue in record.issues:
        assert not case["raw"].strip() or case["raw"] not in issue.text
