"""JSON records: flattening, exactness, and every way in which a text can be no record."""

from __future__ import annotations

import io
from decimal import Decimal

import pytest

from fhirgallop.intake.limits import Limits
from fhirgallop.intake.reading import Rejected
from fhirgallop.intake.rest import read_json, read_ndjson


def values(text, **options):
    reading = read_json(text, **options)
    assert not reading.issues
    (record,) = reading.records
    return {name: field.values for name, field in record.fields.items()}


def test_objects_lists_and_blanks():
    text = b"""{"heart": {"s4": "yes", "rub": null}, "sites": ["AV", "PV"], "note": " ",
               "none": [], "empty": {}, "murmurs": [{"grade": 3}, {"grade": "IV/VI"}], "signed": true,
               "grid": [[1, 2], 3]}"""
    assert values(text) == {
        "heart.s4": ("yes",),
        "heart.rub": (),
        "sites": ("AV", "PV"),
        "note": (),
        "none": (),
        "empty": (),
        "murmurs[0].grade": (Decimal(3),),
        "murmurs[1].grade": ("IV/VI",),
        "signed": (True,),
        "grid[0]": (Decimal(1), Decimal(2)),
        "grid[1]": (Decimal(3),),
    }


@pytest.mark.parametrize("digits", ["120.50", "0.010", "98.0", "-3", "12345678901234567890.5"])
def test_numbers_keep_their_digits(digits):
    ((value,),) = values(f'{{"x": {digits}}}').values()
    assert str(value) == digits


def test_comma_decimals_pass_as_text():
    assert values('{"height": "1,75", "words": "seventy"}') == {"height": ("1,75",), "words": ("seventy",)}


def test_what_a_program_hands_over_is_read_the_same():
    assert values({"a": 1, "b": 1.5, "c": [None, "x"]}) == values('{"a": 1, "b": 1.5, "c": [null, "x"]}')


def test_a_list_at_the_top_is_several_records():
    reading = read_json('[{"a": 1}, 5, {"a": 2}]', source="exams.json")
    assert [record.fields["a"].values for record in reading.records] == [(Decimal(1),), (Decimal(2),)]
    assert [(i.rule, i.field, i.source) for i in reading.issues] == [
        ("json-not-a-record", "[1]", "exams.json")
    ]


@pytest.mark.parametrize(
    ("text", "rule", "field"),
    [
        (b"not json", "json-syntax", ""),
        (b"", "json-syntax", ""),
        (b"5", "json-not-a-record", ""),
        (b'"exam"', "json-not-a-record", ""),
        (b'{"a": 1, "a": 2}', "json-duplicate-key", "a"),
        (b'{"a": NaN}', "json-not-a-number", ""),
        (b'{"a": Infinity}', "json-not-a-number", ""),
        (b'{"a": "' + b"x" * 10_000_000 + b'"}', "json-too-large", ""),
        (b'{"a": "' + b"x" * 100_000 + b'"}', "record-text-too-long", "a"),
        (b'{"a": ' * 10_000 + b"1" + b"}" * 10_000, "json-too-deep", ""),
        (b"[" * 10_000 + b"]" * 10_000, "json-too-deep", ""),
        (b'{"a": ' * 40 + b"1" + b"}" * 40, "json-too-deep", ".".join("a" * 32)),
        (b'{"a": ' + b"[" * 40 + b"]" * 40 + b"}", "json-too-deep", "a" + "[0]" * 31),
        (b'{"a.b": 1, "a": {"b": 2}}', "record-name-twice", "a.b"),
        (b'{"": 1}', "record-bad-name", ""),
        (b'{"' + b"n" * 300 + b'": 1}', "record-bad-name", "n" * 64),
        ('{"a": "Müller"}'.encode("latin-1"), "json-not-utf8", ""),
        ('{"a": 1}'.encode("utf-16"), "json-not-utf8", ""),
        (b"{" + b",".join(b'"f%d": 1' % n for n in range(2001)) + b"}", "record-too-many-fields", ""),
        (b'{"a": [' + b",".join([b'{"b": 1}'] * 2001) + b"]}", "record-too-many-fields", ""),
    ],
)
def test_what_is_no_record_is_refused(text, rule, field):
    reading = read_json(text)
    assert not reading.records
    assert [(i.rule, i.field) for i in reading.issues] == [(rule, field[:64])]
    assert reading.issues[0].is_error


def test_lists_of_lists_cannot_grow_past_the_limit():
    inner = "[" + ",".join(['{"b": 1}'] * 90) + "]"
    reading = read_json('{"a": [' + ",".join([inner] * 90) + "]}", limits=Limits(fields=100))
    assert [i.rule for i in reading.issues] == ["record-too-many-fields"]


def test_a_byte_order_mark_is_said_and_the_record_comes():
    reading = read_json(b'\xef\xbb\xbf{"a": 1}')
    assert reading.records
    assert [(i.rule, i.is_error) for i in reading.issues] == [("json-byte-order-mark", False)]


def test_what_is_no_json_value_of_a_program_is_an_issue():
    reading = read_json({"a": {1, 2}, "b": float("nan"), 3: "x"})
    assert [(i.rule, i.field) for i in reading.issues] == [
        ("json-not-a-value", "a"),
        ("json-not-a-value", "b"),
        ("record-bad-name", "3"),
    ]
    around: dict = {}
    around["self"] = around
    assert read_json(around).issues[0].rule == "json-too-deep"


def test_good_lines_come_out_beside_bad_ones():
    text = b'{"a": 1}\n\n{"a": \n{"a": 2}\r\n[1]\n' + b'{"a": "' + b"x" * 900 + b'"}\n{"a": 3}'
    reads = list(read_ndjson(io.BytesIO(text), source="e.ndjson", limits=Limits(record_bytes=500)))
    assert [(type(r).__name__, r.line) for r in reads] == [
        ("LocalRecord", 1),
        ("Rejected", 3),
        ("LocalRecord", 4),
        ("Rejected", 5),
        ("Rejected", 6),
        ("LocalRecord", 7),
    ]
    assert all(i.line == r.line and i.source == "e.ndjson" for r in reads for i in r.issues)


def test_the_number_of_lines_is_limited():
    reads = list(read_ndjson(io.BytesIO(b'{"a": 1}\n' * 9), limits=Limits(rows=3)))
    assert len(reads) == 4
    assert isinstance(reads[-1], Rejected)
    assert reads[-1].issues[0].severity == "fatal"


def test_no_value_of_a_record_is_ever_told():
    secret = "Sekretariat-4711"
    texts = [
        f'{{"a": {{"b": "{secret * 6000}"}}}}',
        f'["{secret}"]',
        f'{{"a": "{secret}", "a": 1}}',
        f'{{"a": "{secret}',
    ]
    for text in texts:
        assert not any(secret in str(issue) for issue in read_json(text, limits=Limits()).issues)
