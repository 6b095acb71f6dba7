"""What maps make of records (cases in tests/cases/mapping/records.yaml)."""

from __future__ import annotations

from decimal import Decimal
from pathlib import Path
from typing import Any

import pytest
from ruamel.yaml import YAML

from fhirgallop.exam.catalogue import load
from fhirgallop.exam.checks import check
from fhirgallop.exam.entry import Entry
from fhirgallop.intake.record import Amount, Coded, Field, LocalRecord, Span, Value
from fhirgallop.mapping.apply import apply
from fhirgallop.mapping.reading import read_map

CASES = YAML(typ="safe").load(
    (Path(__file__).parents[1] / "cases" / "mapping" / "records.yaml").read_text("utf-8")
)

HEAD = """\
template-map: 1
name: case
version: "1"
record:
  patient: {field: pid, system: "https://fernwood.example/patients"}
  identifier: {field: no, system: "https://fernwood.example/examinations"}
  time: {field: at}
blanks: ["nan"]
"""
KNOWN = {"pid": "F-1", "no": "E-1", "at": "2026-03-14T09:30:00+01:00"}


def number(text: str) -> Decimal | None:
    return Decimal(text) if text else None


def value(written: Any) -> Value:
    if isinstance(written, str):
        return written
    ((kind, content),) = written.items()
    match kind:
        case "truth":
            return content
        case "number":
            return Decimal(content)
        case "coded":
            return Coded(*content)
        case "amount":
            return Amount(Decimal(content[0]), content[1], content[2])
        case "span":
            return Span(number(content[0]), number(content[1]), content[2])
    raise AssertionError(written)


def field(name: str, written: Any) -> Field:
    if isinstance(written, dict) and "values" in written:
        marks = {
            key: tuple(text) if key == "notes" else text for key, text in written.items() if key != "values"
        }
        return Field(name, tuple(value(one) for one in written["values"]), **marks)
    several = written if isinstance(written, list) else [written]
    return Field(name, tuple(value(one) for one in several))


def record_of(case: dict[str, Any]) -> LocalRecord:
    fields = {name: field(name, text) for name, text in {**KNOWN, **case["fields"]}.items()}
    return LocalRecord(case.get("form", "json"), fields)


def described(entry: Entry) -> str:
    parts = [f"{entry.finding}#{entry.instance}" if entry.instance else entry.finding, str(entry.presence)]
    if entry.answers:
        parts.append("+".join(entry.answers))
    if entry.measure:
        measure = entry.measure
        ends = str(measure.value) if measure.high is None else f"{measure.value}..{measure.high}"
        parts.append(f"{measure.comparator}{ends} {measure.unit}")
        if measure.original:
            parts.append(f"from={measure.original}")
    if entry.text:
        parts.append(f'"{entry.text}"')
    for q in entry.qualifiers:
        said = str(q.grade) if q.grade else q.value or f'"{q.text}"'
        parts.append(f"{q.axis}={said}")
    if entry.reason:
        parts.append(f"({entry.reason})")
    parts += [f'note="{note}"' for note in entry.notes]
    if entry.withdrawn:
        parts.append("!withdrawn")
    if entry.time:
        parts.append(f"@{entry.time}")
    return " ".join(parts)


@pytest.mark.parametrize("case", CASES, ids=[case["title"] for case in CASES])
def test_record(case):
    template, faults = read_map(HEAD + case["map"])
    assert template is not None, "\n".join(map(str, faults))
    mapped = apply(record_of(case), template, load())
    assert mapped.exam is not None
    assert [described(entry) for entry in mapped.exam.entries] == [
        text.replace("\\n", "\n") for text in case["entries"]
    ]
    found = [f"{issue.severity} {issue.rule} {issue.field}" for issue in mapped.issues]
    assert sorted(found) == sorted(case.get("issues", []))
    assert list(mapped.exam.notes) == case.get("notes", [])
    assert sorted(mapped.unread) == sorted(case.get("unread", []))
    assert {unknown.field: unknown.value for unknown in mapped.unknown} == case.get("unknown", {})
    checked = [f"{issue.severity} {issue.rule}" for issue in check(mapped.exam, load())]
    empty = [] if case["entries"] else ["warning exam-without-entries"]
    assert checked == case.get("checked", empty)


def test_no_message_repeats_what_a_record_holds():
    marker = "Zeugnis17"
    for case in CASES:
        template, _ = read_map(HEAD + case["map"])
        assert template is not None
        names = template.reads() | {"zzz"}
        for status in ("", "cancelled", "entered-in-error"):
            fields = {
                name: Field(name, (marker,), status=status, time=marker, notes=(marker,)) for name in names
            }
            mapped = apply(LocalRecord("oru", fields), template, load())
            assert mapped.issues
            assert not [
                issue for issue in mapped.issues if marker in f"{issue.text}{issue.field}{issue.source}"
            ]
