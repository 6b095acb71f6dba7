"""Small parts: grades, time formats, patterns of ignored fields, coverage, the schema."""

from __future__ import annotations

import json
from pathlib import Path

import jsonschema_rs
import pytest
from ruamel.yaml import YAML

from fhirgallop.exam.catalogue import load
from fhirgallop.exam.entry import Grade
from fhirgallop.intake.record import Field, LocalRecord
from fhirgallop.mapping import clock, coverage, grades
from fhirgallop.mapping.apply import apply, compiled
from fhirgallop.mapping.coverage import Coverage
from fhirgallop.mapping.reading import load_map, read_map
from fhirgallop.mapping.run import UnknownValue
from fhirgallop.mapping.schema import schema
from fhirgallop.mapping.template_map import Ignored

ROOT = Path(__file__).parents[2]
MAPS = sorted((ROOT / "examples" / "informatician").glob("*.yaml"))


@pytest.mark.parametrize(
    ("text", "grade"),
    [
        ("III/VI", Grade(3, 3, 6)),
        ("iii / vi", Grade(3, 3, 6)),
        ("3/6", Grade(3, 3, 6)),
        ("2-3/6", Grade(2, 3, 6)),
        ("II-III/VI", Grade(2, 3, 6)),
        ("II/VI-III/VI", Grade(2, 3, 6)),
        ("2\u20133/6", Grade(2, 3, 6)),
        ("\u2162/\u2165", Grade(3, 3, 6)),
        ("3", Grade(3, 3, 6)),
        ("II/IV", Grade(2, 2, 4)),
        ("7/6", Grade(7, 7, 6)),
        ("0/6", Grade(0, 0, 6)),
    ],
)
def test_grades(text, grade):
    assert grades.read(text, 6) == grade


@pytest.mark.parametrize(
    "text", ["", "loud", "3/5", "3/VIII", "IIV/VI", "2/6-3/4", "3+", "2.5", "3/6/6/6", "-3", "9" * 5000]
)
def test_no_grades(text):
    assert isinstance(grades.read(text, 6), str)


@pytest.mark.parametrize(
    ("form", "says"),
    [
        ("DD.MM", "year"),
        ("DD.MM.YYYY HH:MM", "twice"),
        ("DD.YYYY", "month"),
        ("YYYY hh:mm", "time of day"),
        ("YYYY-MM-DD hh", "time of day"),
        ("DD. MMM YYYY", "letters"),
    ],
)
def test_time_formats_that_cannot_be(form, says):
    assert says in str(clock.written_form(form))


@pytest.mark.parametrize(
    "zone", ["", "+1", "+15:00", "Mars", "../etc/passwd", "Europe", "/etc/localtime", "+01:60"]
)
def test_unknown_zones(zone):
    assert not clock.zone_is_known(zone)


@pytest.mark.parametrize(
    ("pattern", "name", "covers"),
    [
        ("billing.*", "billing.code", True),
        ("billing.*", "billing.", True),
        ("billing.*", "billing", False),
        ("*.id", "a.b.id", True),
        ("a*b*c", "aXbYc", True),
        ("a*b*c", "acb", False),
        ("a*bc*c", "abc", False),
        ("ab*ba", "aba", False),
        ("a[0]", "a[0]", True),
        ("a[0]", "a0", False),
        ("a*", "b", False),
    ],
)
def test_ignored_patterns(pattern, name, covers):
    assert Ignored(pattern, "x").covers(name) is covers


def test_a_pattern_of_many_stars_stays_quick():
    assert not Ignored("a*" * 2000 + "b", "x").covers("a" * 50_000)


def small_map():
    template, faults = read_map(
        'template-map: 1\nname: small\nversion: "1"\n'
        'record:\n  patient: {field: pid, system: "urn:p"}\n  identifier: {field: no, system: "urn:e"}\n'
        "  time: {field: at}\n"
        "lines:\n"
        '  - {finding: heart-sound.s4, field: s4, choice: {"yes": present}}\n'
        '  - {finding: heart-sound.s3, field: s3, choice: {"yes": present}}\n'
        "  - {finding: heart-sound.gallop, presence: absent, when: {field: s4, is: [never]}}\n"
        "  - {note: remarks}\n"
        "ignore: [{field: clerk, reason: x}]\n"
    )
    assert template is not None, faults
    return template


def row(**cells: str) -> LocalRecord:
    cells = {"pid": "1", "no": "1", "at": "2026", **cells}
    fields = {name: Field(name, (cell,) if cell else ()) for name, cell in cells.items()}
    return LocalRecord("json", fields)


def test_coverage_counts_fields_values_and_lines():
    template = small_map()
    counts = Coverage(template, load())
    for record in (
        row(s4="yes", clerk="K", odd="1"),
        row(s4="maybe", odd=""),
        row(s4="maybe"),
        row(s4="", s3="", remarks="R"),
    ):
        counts.add(record, apply(record, template, load()))
    assert (counts.records, counts.coded) == (4, 2)
    uses = {count.name: (count.use, count.filled, count.blank) for count in counts.fields()}
    assert uses["s4"] == ("read", 3, 1)
    assert uses["s3"] == ("read", 0, 1)
    assert uses["clerk"] == ("ignored", 1, 0)
    assert uses["odd"] == ("unread", 1, 1)
    assert counts.unknown() == [(UnknownValue("s4", "maybe"), 2)]
    assert [line.records for line in counts.lines()] == [3, 0, 0, 1]
    found = sorted((issue.rule, issue.field, issue.line) for issue in counts.issues())
    assert found == [
        ("map-field-unread", "odd", 0),
        ("map-line-untouched", "", 11),
        ("map-line-untouched", "s3", 10),
        ("map-value-unknown", "s4", 0),
    ]
    assert not [issue for issue in counts.issues() if "maybe" in issue.text]


def test_coverage_counts_boxes_that_only_decide_and_whose_wording_is_in_no_list():
    template, faults = read_map(
        'template-map: 1\nname: small\nversion: "1"\n'
        'record:\n  patient: {field: pid, system: "urn:p"}\n  identifier: {field: no, system: "urn:e"}\n'
        "  time: {field: at}\n"
        'lines: [{finding: heart-sound.s3, presence: absent, when: {field: done, is: ["yes"]}}]\n'
    )
    assert template is not None, faults
    counts = Coverage(template, load())
    for said in ("yes", "YES ", "", "halfway", "hardly"):
        record = row(done=said)
        mapped = apply(record, template, load())
        assert mapped.exam is not None
        assert not any(issue.is_error for issue in mapped.issues)
        counts.add(record, mapped)
    assert counts.coded == 5
    (issue,) = counts.issues()
    assert (issue.severity, issue.rule, issue.field) == ("information", "map-value-only-tested", "done")
    assert "2 records" in issue.text


def test_coverage_names_fields_that_no_record_has():
    template = small_map()
    counts = Coverage(template, load())
    assert counts.issues() == []
    record = row(s4="yes", s3="yes")
    counts.add(record, apply(record, template, load()))
    assert [issue.field for issue in counts.issues() if issue.rule == "map-field-never-seen"] == ["remarks"]


def test_coverage_tells_a_bounded_number_of_names_apart(monkeypatch):
    monkeypatch.setattr(coverage, "MAX_DISTINCT", 10)
    template = small_map()
    counts = Coverage(template, load())
    for number in range(30):
        record = row(s4=f"odd {number}", **{f"x{number}": "1"})
        counts.add(record, apply(record, template, load()))
    assert len([count for count in counts.fields() if count.filled]) == 10
    assert len(counts.unknown()) == 10
    assert counts.further == 20 + 24


def test_a_map_is_made_ready_once():
    template = small_map()
    assert compiled(template, load()) is compiled(template, load())
    assert compiled(small_map(), load()) is not compiled(template, load())


def test_published_schema_is_the_one_that_the_grammar_makes():
    published = ROOT / "fhirgallop" / "mapping" / "template_map.schema.json"
    assert json.loads(published.read_text("utf-8")) == schema()


@pytest.mark.parametrize("path", MAPS, ids=lambda path: path.name)
def test_example_maps_are_read_without_a_fault_and_conform_to_the_schema(path):
    load_map(path)
    _, issues = read_map(path.read_bytes())
    assert issues == []
    as_an_editor_sees_it = YAML(typ="safe").load(path.read_text("utf-8"))
    jsonschema_rs.validator_for(schema()).validate(json.loads(json.dumps(as_an_editor_sees_it)))


def test_the_schema_refuses_what_the_reader_refuses():
    validator = jsonschema_rs.validator_for(schema())
    good = YAML(typ="safe").load(MAPS[0].read_text("utf-8"))
    assert validator.is_valid(good)
    for change in (
        {"liness": []},
        {"template-map": 2},
        {"name": "a b"},
        {"lines": []},
        {"lines": [{"field": "a"}]},
    ):
        assert not validator.is_valid({**good, **change})
