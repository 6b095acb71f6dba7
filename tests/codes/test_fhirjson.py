"""Exact JSON: digits survive, and what JSON forbids comes back as an issue."""

from __future__ import annotations

from decimal import Decimal

import pytest
from hypothesis import given
from hypothesis import strategies as st

from fhirgallop.codes import fhirjson


def rules(text):
    return [issue.rule for issue in fhirjson.read(text)[1]]


@pytest.mark.parametrize("digits", ["1.20", "0.010", "100.0", "12345678901234567890.5", "1E+2", "-0.0"])
def test_decimals_keep_their_digits(digits):
    value, issues = fhirjson.read(f'{{"value": {digits}}}')
    assert not issues
    assert str(value["value"]) == digits
    assert fhirjson.write(value) == b'{"value":' + digits.encode() + b"}"


def test_whole_numbers_are_ints():
    assert fhirjson.read("[3]") == ([3], [])


@pytest.mark.parametrize(
    ("text", "rule"),
    [
        (b"not json", "json-syntax"),
        (b"", "json-syntax"),
        (b'{"a": 1, "a": 2}', "json-duplicate-key"),
        (b'{"a": NaN}', "json-not-a-number"),
        (b'{"a": -Infinity}', "json-not-a-number"),
        (b'{"a": "\xe9"}', "json-not-utf8"),
        (b'{"a": "\\ud800"}', "json-lone-surrogate"),
        (b"[" * 10_000 + b"]" * 10_000, "json-too-deep"),
        (b'{"a": ' + b"9" * 401 + b"}", "json-number-too-long"),
        (b'{"a": 1' + b"0" * 500 + b".5}", "json-number-too-long"),
    ],
)
def test_faults_are_fatal_issues(text, rule):
    value, issues = fhirjson.read(text)
    assert value is None
    assert [(issue.severity, issue.rule) for issue in issues] == [("fatal", rule)]


def test_a_byte_order_mark_is_skipped_and_said():
    value, issues = fhirjson.read(b'\xef\xbb\xbf{"a": 1}')
    assert value == {"a": 1}
    assert [(issue.severity, issue.rule) for issue in issues] == [("warning", "json-byte-order-mark")]


def test_the_place_of_a_syntax_fault_is_named():
    (issue,) = fhirjson.read('{\n "a": 1,\n "b" 2\n}', source="record.json")[1]
    assert (issue.source, issue.line) == ("record.json", 3)


def test_size_is_limited():
    assert [i.rule for i in fhirjson.read(b'"' + b"x" * 100 + b'"', max_bytes=50)[1]] == ["json-too-large"]


scalars = (
    st.none() | st.booleans() | st.integers() | st.text() | st.decimals(allow_nan=False, allow_infinity=False)
)
values = st.recursive(
    scalars,
    lambda inner: st.lists(inner, max_size=4) | st.dictionaries(st.text(), inner, max_size=4),
    max_leaves=12,
)


@given(values)
def test_what_is_written_reads_back_the_same(value):
    back, issues = fhirjson.read(fhirjson.write(value))
    assert not issues
    assert back == value


@given(st.binary(max_size=200) | st.text(max_size=200))
def test_no_input_ever_raises(text):
    fhirjson.read(text)


def test_equal_numbers_of_other_precision_stay_apart():
    assert fhirjson.write([Decimal("1.0"), Decimal("1.00")]) == b"[1.0,1.00]"
