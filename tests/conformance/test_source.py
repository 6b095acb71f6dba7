"""Reading: what is wrong with the text itself, exact numbers, and places in the text."""

from __future__ import annotations

import json
from decimal import Decimal

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from fhirgallop.conformance import source
from fhirgallop.conformance.validator import validate

PATIENT = '{"resourceType":"Patient","text":{"status":"generated","div":"<div xmlns=\\"http://www.w3.org/1999/xhtml\\">A</div>"}%s}'


@pytest.mark.parametrize(
    ("text", "rule", "line"),
    [
        (b"\xef\xbb\xbf" + (PATIENT % "").encode(), "json-bom", 1),
        (b'{"resourceType":\n "Pat\xffient"}', "utf-8", 2),
        (b'{"resourceType":"Patient",\n"id" 1}', "json-syntax", 2),
        (b"", "json-syntax", 1),
        (b"[]", "json-object", 0),
        (b'"Patient"', "json-object", 0),
        (b"{}", "resource-type-missing", 0),
        (b'{"resourceType":"Heart"}', "resource-type-unknown", 0),
        (b'{"resourceType":7}', "resource-type-missing", 0),
        ((PATIENT % ',"id":"a",\n"id":"b"').encode(), "json-duplicate-key", 2),
        ((PATIENT % ',"id":"\\ud800"').encode(), "json-surrogate", 1),
        ("\ud800", "json-surrogate", 0),
        (b'{"resourceType":"Observation","valueQuantity":{"value":NaN}}', "json-number", 1),
        (b'{"resourceType":"Patient","contact":' + b"[" * 500 + b"]" * 500 + b"}", "depth-limit", 0),
        (b'{"a":' * 3000 + b"1" + b"}" * 3000, "depth-limit", 0),
    ],
)
def test_faults_of_the_text(text: bytes | str, rule: str, line: int) -> None:
    found = [(issue.rule, issue.line) for issue in validate(text)]
    assert (rule, line) in found


def test_duplicate_key_has_its_object_as_place_and_is_found_however_the_text_is_laid_out() -> None:
    compact = '{"resourceType":"Patient","name":[{"family":"A","family":"B"}]}'
    spaced = '{ "resourceType" : "Patient",\n "name" : [ { "family":"A",\n "fam\\u0069ly":"B" } ] }'
    for text in (compact, spaced):
        found = [i for i in validate(text) if i.rule == "json-duplicate-key"]
        assert [i.expression for i in found] == ["Patient.name[0]"]


def test_decimals_stay_exact() -> None:
    read = source.exact(b'{"a":1.20,"b":1e2,"c":3}')
    assert read.value["a"].as_tuple() == Decimal("1.20").as_tuple()
    assert isinstance(read.value["b"], Decimal)
    assert read.value["c"] == 3
    assert isinstance(read.value["c"], int)


def test_long_numbers_are_an_issue_and_no_exception() -> None:
    text = b'{"resourceType":"Observation","valueInteger":' + b"9" * 5000 + b"}"
    assert "json-number" in {i.rule for i in validate(text)}
    assert source.exact(b'{"a":' + b"1" * 400 + b"." + b"3" * 400 + b"}").value["a"] > 0


JSON = st.recursive(
    st.none() | st.booleans() | st.integers(-9, 9) | st.text(max_size=6),
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.text(max_size=4), inner, max_size=3),
    max_leaves=12,
)


@given(JSON, st.sampled_from([None, 2]))
@settings(max_examples=150, deadline=None)
def test_places_are_where_a_plain_parse_puts_them(value: object, indent: int | None) -> None:
    text = json.dumps(value, indent=indent).encode()
    paths = list(_paths(value, ()))
    found = source.locate(text, [path for path, _ in paths])
    lines = text.decode().split("\n")
    for path, inner in paths:
        line, column = found[path]
        rest = lines[line - 1][column - 1 :] + "\n" + "\n".join(lines[line:])
        assert json.JSONDecoder().raw_decode(rest)[0] == inner


@given(JSON)
@settings(max_examples=100, deadline=None)
def test_a_text_without_repeated_keys_has_none(value: object) -> None:
    assert source.duplicates(json.dumps(value).encode()) == []


def _paths(value: object, at: tuple[str | int, ...]) -> list[tuple[tuple[str | int, ...], object]]:
    found: list[tuple[tuple[str | int, ...], object]] = [(at, value)]
    if isinstance(value, dict):
        for key, inner in value.items():
            found += _paths(inner, (*at, key))
    elif isinstance(value, list):
        for index, inner in enumerate(value):
            found += _paths(inner, (*at, index))
    return found


def test_issues_of_a_text_carry_line_and_column_and_those_of_an_object_do_not() -> None:
    text = '{"resourceType":"Patient",\n "birthDate":"2026-02-30"}'
    found = next(i for i in validate(text) if i.rule == "date-calendar")
    assert (found.line, found.column) == (2, 14)
    assert next(i for i in validate(json.loads(text)) if i.rule == "date-calendar").line == 0
