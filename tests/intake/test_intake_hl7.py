"""ORU^R01 messages: what becomes of the header, the entries, and of everything that is wrong with them."""

from __future__ import annotations

import io
from decimal import Decimal

import pytest

from fhirgallop.intake.hl7v2 import read_hl7, read_message
from fhirgallop.intake.limits import Limits
from fhirgallop.intake.reading import Rejected
from fhirgallop.intake.record import Amount, Coded, Header


def rules(reading):
    return [i.rule for i in reading.issues] + [i.rule for record in reading.records for i in record.issues]


def entry(letter="F", name="X", value="1", sub="", kind="ST", more=""):
    return f"OBX|9|{kind}|{name}|{sub}|{value}||||||{letter}{more}"


def test_a_message_is_an_examination(oru):
    reading = read_message(oru(), source="exam.hl7")
    (record,) = reading.records
    assert not rules(reading)
    assert record.form == "oru"
    assert (record.source, record.line) == ("exam.hl7", 4)
    assert record.header == Header(
        patient="P-17",
        encounter="V-9",
        time="2026-03-14T09:30:00+01:00",
        examiner="EX-1",
        identifier="FI-1",
        status="final",
    )
    assert record.fields["S4"].values == (Coded("Y", "yes", "L"),)
    assert record.fields["HR"].values == (Amount(Decimal(72), "/min"),)
    assert (record.fields["HR"].status, record.fields["HR"].line) == ("final", 6)


@pytest.mark.parametrize("end", ["\r", "\n", "\r\n"])
def test_any_line_end_and_the_frame_of_mllp(oru, end):
    framed = b"\x0b" + oru(end=end) + b"\x1c\r"
    plain = read_message(oru())
    assert read_message(framed).records[0].fields == plain.records[0].fields
    (streamed,) = read_hl7(io.BytesIO(framed))
    assert streamed.fields == plain.records[0].fields


def test_other_delimiters_that_msh_declares(oru):
    changed = oru().decode().replace("&", "%").replace("|", "!").replace("^", "*")
    assert read_message(changed).records[0].fields == read_message(oru()).records[0].fields


@pytest.mark.parametrize(
    ("letter", "status", "rule"),
    [
        ("F", "final", ""), ("P", "preliminary", ""), ("C", "corrected", ""), ("A", "amended", ""),
        ("D", "entered-in-error", ""), ("W", "entered-in-error", ""), ("X", "cancelled", ""),
        ("N", "not-asked", ""),
        *((letter, "preliminary", "hl7-entry-status-without-counterpart") for letter in "BIORSUV"),
        ("", "preliminary", "hl7-entry-status-unknown"), ("Q", "preliminary", "hl7-entry-status-unknown"),
        ("FF", "preliminary", "hl7-entry-status-unknown"),
    ],
)  # fmt: skip
def test_every_entry_status(oru, letter, status, rule):
    record = read_message(oru(entry(letter))).records[0]
    assert record.fields["X"].status == status
    found = [i for i in record.issues if i.field == "X"]
    assert [i.rule for i in found] == ([rule] if rule else [])
    if status == "preliminary":
        assert record.header.status == "preliminary"


@pytest.mark.parametrize(
    ("letter", "status", "rule", "is_error"),
    [
        ("F", "final", "", False), ("P", "preliminary", "", False), ("R", "preliminary", "", False),
        ("C", "corrected", "", False), ("X", "cancelled", "", False),
        *((c, "preliminary", "hl7-report-status-without-counterpart", False) for c in "OISAMN"),
        ("Y", "", "hl7-report-status-unknown", True), ("Z", "", "hl7-report-status-unknown", True),
        ("", "", "hl7-report-status-missing", True),
    ],
)  # fmt: skip
def test_every_report_status(oru, letter, status, rule, is_error):
    record = read_message(oru(OBR="OBR|1||FI-1||||20260314" + "|" * 18 + letter)).records[0]
    assert record.header.status == status
    assert [i.rule for i in record.issues] == ([rule] if rule else [])
    assert any(i.is_error for i in record.issues) is is_error


@pytest.mark.parametrize(
    ("change", "rule"),
    [
        ({"without": "OBR"}, "hl7-no-obr"),
        ({"without": "MSH"}, "hl7-no-msh"),
        ({"MSH": "MSH|^~|||||x||ORU^R01|M1"}, "hl7-separators"),
        ({"MSH": "MSH|^^^^|||||x||ORU^R01|M1"}, "hl7-separators"),
        ({"MSH": "MSHAB~CD|"}, "hl7-separators"),
        ({"MSH": "MSH"}, "hl7-separators"),
        ({"OBX": "OBX;1;ST;X;;1"}, "hl7-broken-segment"),
        ({"OBX": "and the text goes on here"}, "hl7-broken-segment"),
        ({"MSH": "MSH|^~\\&|||||20260314||ADT^A01|M1|P|2.5.1"}, "hl7-message-type"),
        ({"MSH": "MSH|^~\\&|||||20260314||ORU^R01|M1|P|2.5.1||||||KLINGON"}, "hl7-charset-unsupported"),
    ],
)
def test_messages_that_are_refused(oru, change, rule):
    reading = read_message(oru(**change))
    assert not reading.records
    assert rule in [i.rule for i in reading.issues if i.is_error]


def test_an_unknown_value_type_is_named_and_its_value_is_not(oru):
    record = read_message(oru(entry(kind="QQ", value="secret"))).records[0]
    (issue,) = record.issues
    assert (issue.rule, issue.severity, issue.field, issue.line) == (
        "hl7-unknown-value-type",
        "error",
        "X",
        7,
    )
    assert "secret" not in issue.text
    assert "X" not in record.fields, "an entry that cannot be read is not a blank one"


def test_a_file_in_an_entry_is_left_out_and_said(oru):
    record = read_message(oru(entry(kind="ED", value="^AP^PDF^Base64^JVBERi0="))).records[0]
    assert [(i.rule, i.severity) for i in record.issues] == [("hl7-value-type-not-read", "warning")]
    assert "X" not in record.fields


def test_sub_identifiers_tell_like_entries_apart(oru):
    record = read_message(oru(entry(sub="1", value="a"), entry(sub="2", value="b"), entry(name="Y", sub="1")))
    assert {n: f.values for n, f in record.records[0].fields.items() if n[0] in "XY"} == {
        "X/1": ("a",),
        "X/2": ("b",),
        "Y": ("1",),
    }


def test_lines_of_text_are_values_of_one_field(oru):
    record = read_message(oru(entry(kind="TX", value="one"), entry(kind="TX", value="two"))).records[0]
    assert record.fields["X"].values == ("one", "two")


def test_the_same_entry_under_other_circumstances_stays_apart(oru):
    record = read_message(oru(entry("F", value="a"), entry("D", value="b"))).records[0]
    assert (record.fields["X"].values, record.fields["X[1]"].values) == (("a",), ("b",))
    assert [i.rule for i in record.issues] == ["hl7-repeated-identifier"]


def test_time_performer_method_site_and_remarks_of_an_entry(oru):
    more = "|||202603141015||EX-2^Doe|palp^Palpation^L||20260314|APEX^Apex^L"
    record = read_message(oru(entry(more=more), "NTE|1|L|first\\.br\\line~second", "NTE|2|L|third")).records[
        0
    ]
    field = record.fields["X"]
    assert (field.time, field.performer, field.method, field.site) == (
        "2026-03-14T10:15",
        "EX-2",
        "palp",
        "APEX",
    )
    assert field.notes == ("first\nline\nsecond", "third")
    assert [i.text for i in record.issues] == ["Parts of OBX that are not read: OBX-19 (1)."]


def test_a_remark_of_the_whole_examination_is_a_field(oru):
    lines = oru().decode().split("\r")
    text = "\r".join([*lines[:4], "NTE|1|L|as a whole", *lines[4:]])
    assert read_message(text).records[0].fields["NTE"].values == ("as a whole",)


def test_segments_that_no_one_reads_are_named(oru):
    record = read_message(oru("ZFG|1|x", "SPM|1", "ZFG|2|y")).records[0]
    (issue,) = record.issues
    assert (issue.rule, issue.severity) == ("hl7-segment-not-read", "information")
    assert "ZFG (2), SPM (1)" in issue.text


def test_several_orders_are_several_examinations(oru):
    second = "OBR|2|||HEART|||20260315" + "|" * 18 + "F"
    records = read_message(oru(second, entry(value="b"))).records
    assert [(r.header.identifier, r.header.time) for r in records] == [
        ("FI-1", "2026-03-14T09:30:00+01:00"),
        ("M-1/2", "2026-03-15"),
    ]
    assert list(records[1].fields) == ["X"]


def test_the_examiner_is_taken_from_the_entries_when_the_order_names_none(oru):
    message = oru(entry(more="|||||EX-5"), OBR="OBR|1||FI-1||||20260314" + "|" * 18 + "F")
    assert read_message(message).records[0].header.examiner == "EX-5"


@pytest.mark.parametrize(
    ("charset", "encoding", "rule"),
    [("UNICODE UTF-8", "utf-8", ""), ("8859/1", "latin-1", ""), ("8859/15", "iso8859-15", ""),
     ("", "utf-8", ""),
     ("", "cp1252", "hl7-charset-missing"), ("ASCII", "latin-1", "hl7-charset-missing")],
)  # fmt: skip
def test_character_sets(oru, charset, encoding, rule):
    text = oru(entry(value="Müller")).decode().replace("UNICODE UTF-8", charset)
    record = read_message(text.encode(encoding)).records[0]
    assert record.fields["X"].values == ("Müller",)
    assert [i.rule for i in record.issues] == ([rule] if rule else [])


def test_a_wrong_character_set_is_refused(oru):
    reading = read_message(oru(entry(value="Müller")).decode().encode("latin-1"))
    assert [i.rule for i in reading.issues] == ["hl7-charset-wrong"]
    assert [i.rule for i in read_message("MSH".encode("utf-16")).issues] == ["hl7-utf16"]


def test_a_bad_time_is_an_error_and_is_not_echoed(oru):
    message = oru(entry(more="|||yesterday"), OBR="OBR|1||FI-1||||14.3.2026" + "|" * 18 + "F")
    found = [i for i in read_message(message).records[0].issues if i.rule == "hl7-bad-time"]
    assert [(i.severity, i.field) for i in found] == [("error", "X"), ("error", "OBR-7")]
    assert not any("yesterday" in i.text or "14.3." in i.text for i in found)


def test_an_entry_without_a_name_is_an_error(oru):
    assert "hl7-no-identifier" in rules(read_message(oru(entry(name=""))))
    named = read_message(oru(entry(name="^^^ALT^Other^L"))).records[0]
    assert "ALT" in named.fields


def test_a_blank_entry_is_a_blank_field(oru):
    record = read_message(oru("OBX|3|ST|X||||||||F", 'OBX|4|ST|Y||""||||||F', "OBX|5||Z||||||||F")).records[0]
    assert [record.fields[n].values for n in "XYZ"] == [(), (), ()]


def test_a_batch_gives_its_good_messages(oru):
    batch = b"FHS|^~\\&|\rBHS|^~\\&|\r" + oru() + oru(without="OBR") + oru() + b"BTS|2\rFTS|1\r"
    reads = list(read_hl7(io.BytesIO(batch), source="b.hl7"))
    assert [type(r).__name__ for r in reads] == ["LocalRecord", "Rejected", "LocalRecord", "Rejected"]
    assert [r.line for r in reads] == [6, 9, 17, 20]
    assert reads[3].issues[0].rule == "hl7-batch-count"
    assert all(i.source == "b.hl7" for r in reads for i in r.issues)


def test_sizes_are_limited(oru):
    big = oru(entry(value="x" * 5000))
    small = Limits(record_bytes=2000)
    assert [i.rule for i in read_message(big, limits=small).issues] == ["hl7-too-large"]
    reads = list(read_hl7(io.BytesIO(big + oru()), limits=small))
    assert isinstance(reads[0], Rejected)
    assert reads[1].fields
    many = oru(*(entry(name=f"N{n}") for n in range(300)))
    assert [i.rule for i in read_message(many, limits=Limits(fields=100)).issues] == ["hl7-too-many-fields"]


def test_a_file_without_a_message():
    (read,) = read_hl7(io.BytesIO(b""))
    assert read.issues[0].rule == "hl7-no-msh"
