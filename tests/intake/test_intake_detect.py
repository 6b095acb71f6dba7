"""Choosing the reader, noticing records that come twice, and memory that stays flat."""

from __future__ import annotations

import io
import json
import tracemalloc

import pytest

from fhirgallop.intake.detect import BY_CONTENT_TYPE, BY_ENDING, kind_of, open_records
from fhirgallop.intake.limits import Limits
from fhirgallop.intake.lines import numbered


def rules(reads):
    return [[i.rule for i in read.issues] for read in reads]


def test_one_examination_in_all_forms(oru, response, book, tmp_path):
    contents = {
        "e.json": b'{"s4": "yes"}',
        "e.ndjson": b'{"s4": "yes"}\n',
        "e.csv": b"s4\nyes\n",
        "e.tsv": b"s4\tx\nyes\t\n",
        "e.xlsx": book([["s4"], ["yes"]]),
        "e.hl7": oru(),
        "r.json": json.dumps(response).encode(),
        "r.ndjson": json.dumps(response).encode(),
    }
    forms = []
    for name, content in contents.items():
        path = tmp_path / name
        path.write_bytes(content)
        (record,) = open_records(path)
        assert record.source == name
        forms.append(record.form)
    assert forms == ["json", "json", "table", "table", "table", "oru", *["questionnaire-response"] * 2]


@pytest.mark.parametrize("options", [{"content_type": "image/png"}, {"name": "e.pdf"}, {}])
def test_an_unknown_kind_is_named_with_those_accepted(options):
    (read,) = open_records(b"x", **options)
    assert read.issues[0].rule == "input-unknown-type"
    known = BY_CONTENT_TYPE if "content_type" in options else BY_ENDING
    assert all(kind in read.issues[0].text for kind in known)


def test_the_content_type_goes_before_the_name():
    assert kind_of(content_type="Text/CSV; charset=utf-8", name="e.json") == "csv"
    assert kind_of(name="E.JSON") == "json"


def test_a_questionnaire_judges_responses_in_a_stream(response):
    form = {"resourceType": "Questionnaire", "item": [{"linkId": "s5", "type": "choice"}]}
    (read,) = open_records(
        json.dumps(response).encode(), content_type="application/fhir+json", questionnaire=form
    )
    assert rules([read]) == [["form-unknown-link"]]


def test_a_record_that_comes_twice_is_named_with_both_lines():
    reads = list(open_records(b'{"a": 1}\n{"a": 2}\n{"a": 1}\n{"a": 1.0}\n', name="e.ndjson"))
    assert rules(reads) == [[], [], ["record-repeated"], []]
    assert "line 1" in reads[2].issues[0].text
    assert "line 3" in reads[2].issues[0].text


def test_an_examination_number_that_comes_twice_is_named(oru):
    changed = oru().replace(b"Y^yes", b"N^no")
    reads = list(open_records(oru() + changed, name="e.hl7"))
    assert rules(reads) == [[], ["record-repeated"]]
    assert "content differs" in reads[1].issues[0].text


def test_text_and_number_and_order_of_values_are_no_repeats():
    text = b'{"a": 1}\n{"a": "1"}\n{"a": [1, 2]}\n{"a": [2, 1]}\n{"a": true}\n{"a": "True"}\n'
    assert rules(open_records(text, name="e.ndjson")) == [[]] * 6


def test_only_so_many_records_are_remembered():
    text = b"".join(b'{"a": %d}\n' % n for n in (1, *range(100, 120), 1))
    assert rules(open_records(text, name="e.ndjson", limits=Limits(remembered=3)))[-1] == []


def test_memory_does_not_grow_with_the_file():
    class Endless(io.RawIOBase):
        def __init__(self, rows):
            self.rows = rows

        def read(self, size=-1):
            self.rows -= 1
            return b'{"a": "%d", "b": "%s"}\n' % (self.rows, b"x" * 500) if self.rows > 0 else b""

    def peak(rows):
        tracemalloc.start()
        count = sum(1 for _ in open_records(Endless(rows), name="e.ndjson", limits=Limits(remembered=100)))
        used = tracemalloc.get_traced_memory()[1]
        tracemalloc.stop()
        assert count == rows - 1
        return used

    peak(10)
    assert peak(3000) < 2 * peak(300)


@pytest.mark.parametrize("size", [1, 2, 3, 7])
def test_lines_are_the_same_however_the_bytes_arrive(size):
    class Drip(io.BytesIO):
        def read(self, _size=-1):
            return super().read(size)

    data = b"one\r\ntwo\rthree\n\nlooooooong\nlast"
    expected = [(1, b"one\r\n"), (2, b"two\r"), (3, b"three\n"), (4, b"\n"), (5, None), (6, b"last")]
    assert list(numbered(Drip(data), 8)) == expected
    assert list(numbered(io.BytesIO(data), 8)) == expected


def test_a_long_line_costs_no_more_time_than_its_length():
    """A minute-long run would show a scan that starts again at each byte."""
    data = b"x" * 8_000_000
    assert list(numbered(io.BytesIO(data + b"\nlast"), 10)) == [(1, None), (2, b"last")]
    assert list(numbered(io.BytesIO(data), len(data))) == [(1, data)]


def test_a_json_list_may_be_larger_than_one_record():
    limits = Limits(record_bytes=100, list_bytes=400)
    one = b'{"a": "' + b"x" * 40 + b'"}'
    many = b"\xef\xbb\xbf [" + b",".join([one.replace(b"x", b"%d" % n, 1) for n in range(6)]) + b"]"
    assert len(list(open_records(many, name="e.json", limits=limits))) == 6
    for text in (b"[" + b",".join([one] * 9) + b"]", b'{"a": "' + b"x" * 100 + b'"}'):
        (read,) = open_records(text, name="e.json", limits=limits)
        assert rules([read]) == [["json-too-large"]]


def test_a_record_of_a_json_list_knows_its_place():
    reads = open_records(b'[{"a": 1}, 5, {"a": 2}]', name="e.json")
    assert [read.source for read in reads] == ["e.json[0]", "e.json", "e.json[2]"]


def test_another_fhir_resource_is_told_once_instead_of_read_as_a_form():
    patient = b'{"resourceType": "Patient", "name": [{"family": "Example"}]}'
    for kind in ("application/fhir+json", "application/json"):
        (read,) = open_records(patient, content_type=kind)
        assert [issue.rule for issue in read.issues] == ["form-not-a-response"]
