"""Whatever bytes come, no reader raises, every fault is an Issue, and good records still come out."""

from __future__ import annotations

import io
from functools import cache

import openpyxl
import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st

from fhirgallop.intake.detect import BY_ENDING, open_records
from fhirgallop.intake.hl7_ack import ack
from fhirgallop.intake.hl7_syntax import escaped, unescaped
from fhirgallop.intake.hl7v2 import read_message
from fhirgallop.intake.limits import Limits
from fhirgallop.intake.questionnaire import read_response
from fhirgallop.intake.reading import Rejected
from fhirgallop.intake.record import LocalRecord
from fhirgallop.intake.rest import read_json
from fhirgallop.outcome import operation_outcome

SMALL = Limits(record_bytes=300, text=40, name=10, depth=4, fields=8, rows=6, remembered=2)


def judged(reads):
    for read in reads:
        assert isinstance(read, (LocalRecord, Rejected))
        assert isinstance(read, LocalRecord) or read.issues
        assert operation_outcome(read.issues)["issue"]
        for issue in read.issues:
            assert issue.rule
            assert issue.text.endswith((".", "?"))


segments = st.lists(
    st.sampled_from(
        [b"MSH|^~\\&|||||x||ORU^R01|1|P|2.8\r", b"OBR|1||F", b"OBX|1|NM|X||1", b"|", b"^", b"~", b"\\", b"&",
         b"OBX|2|SN|Y|1|<^5^-^6|cm|||||F\r", b"NTE|1||a\\.br\\b\r", b"\n", b"\r", b"\x0b", b"\x1c",
         b"BTS|9\r", b"\xff", b"x" * 50]
    ),
    max_size=25,
).map(b"".join)  # fmt: skip
tables = st.lists(
    st.sampled_from([b"a,b\n", b"1,2\n", b'"', b",", b";", b"\n", b"\r", b"\xfc", b"\xc3\xbc", b"\0",
         b"sep=;\n", b"x" * 60]),
    max_size=25,
).map(b"".join)  # fmt: skip
texts = st.binary(max_size=400) | segments | tables


@pytest.mark.parametrize("ending", sorted(BY_ENDING))
@given(texts)
@example(b"PK\x03\x04")
@settings(max_examples=60)
def test_no_bytes_ever_raise(ending, data):
    judged(open_records(data, name=f"e{ending}", limits=SMALL))
    judged(open_records(data, name=f"e{ending}"))


@cache
def spreadsheet() -> bytes:
    """Made once: it holds the time of day, and with it its length changes."""
    workbook = openpyxl.Workbook()
    workbook.active.append(["a", "b"])
    workbook.active.append(["x", 1])
    made = io.BytesIO()
    workbook.save(made)
    return made.getvalue()


@given(st.data())
@settings(max_examples=60)
def test_a_damaged_spreadsheet_never_raises(data):
    content = bytearray(spreadsheet())
    for _ in range(data.draw(st.integers(1, 8))):
        content[data.draw(st.integers(0, len(content) - 1))] = data.draw(st.integers(0, 255))
    judged(open_records(bytes(content), name="e.xlsx"))


json_values = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=50),
    lambda inner: st.lists(inner, max_size=4) | st.dictionaries(st.text(max_size=12), inner, max_size=4),
    max_leaves=20,
)


@given(json_values)
def test_no_json_value_ever_raises(value):
    if isinstance(value, (dict, list)):
        judged(read_json(value, limits=SMALL).stream())
        judged(read_json(value).stream())


responses = st.fixed_dictionaries(
    {"resourceType": st.just("QuestionnaireResponse")},
    optional={
        "status": st.sampled_from(["completed", "stopped", "?"]) | json_values,
        "subject": json_values | st.fixed_dictionaries({"reference": st.text(max_size=9)}),
        "authored": json_values,
        "author": json_values,
        "identifier": json_values,
        "questionnaire": json_values,
        "item": st.recursive(
            json_values,
            lambda inner: st.lists(
                st.fixed_dictionaries(
                    {},
                    optional={
                        "linkId": st.sampled_from(["a", "b"]) | json_values,
                        "item": inner,
                        "answer": st.lists(
                            st.fixed_dictionaries(
                                {},
                                optional={
                                    "valueQuantity": json_values
                                    | st.fixed_dictionaries({"value": json_values}),
                                    "valueCoding": json_values,
                                    "valueString": json_values,
                                    "item": inner,
                                },
                            ),
                            max_size=2,
                        ),
                    },
                ),
                max_size=3,
            ),
            max_leaves=4,
        ),
    },
)


@given(responses, json_values)
def test_no_response_ever_raises(response, form):
    judged(read_response(response, limits=SMALL).stream())
    judged(read_response(response, questionnaire=form if isinstance(form, dict) else {"item": form}).stream())


@given(st.text(max_size=80))
def test_escaping_and_back(text):
    plain = text.replace("\r", "")
    assert unescaped(escaped(plain)) == (plain, True)


@given(st.text("\\FSTREXbr.sp0123456789 |", max_size=60))
def test_unescaping_never_raises_and_never_grows_much(text):
    assert len(unescaped(text)[0]) <= 20 * len(text) + 20


@given(segments)
def test_every_message_is_acknowledged(moment, message):
    reading = read_message(message)
    answer = ack(message, reading.issues, control_id="A", now=moment)
    assert answer.startswith(b"MSH")
    assert answer.count(b"\r") == 2 + len(set(reading.issues))


@given(segments)
def test_a_good_message_comes_out_whatever_stands_before_it(before):
    good = (
        b"\rMSH|^~\\&|||||2026||ORU^R01|GOOD|P|2.8\rOBR|1||GOOD||||2026"
        + b"|" * 18
        + b"F\rOBX|1|ST|X||1||||||F\r"
    )
    reads = list(open_records(before + good, name="e.hl7"))
    assert isinstance(reads[-1], LocalRecord)
    assert reads[-1].header.identifier == "GOOD"
