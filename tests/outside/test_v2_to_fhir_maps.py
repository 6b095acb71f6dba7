"""Statuses and value types against the published tables of the HL7 v2-to-FHIR guide.

Source: HL7 "V2-to-FHIR" implementation guide, repository HL7/v2-to-fhir, commit 04f95a12, tables "FHIR E2":
code system maps ObservationResultStatusCodesInterpretation (table 0085) and ResultStatus[Non-Queries]
(table 0123), segment map OBX[Observation]. The rows below are the facts of these tables; blank = no target.
"""

from __future__ import annotations

from decimal import Decimal

import pytest

from fhirgallop.intake.hl7v2 import ENTRY_STATUS, REPORT_STATUS, read_message
from fhirgallop.intake.record import Amount, Coded, Span

TABLE_0085 = {
    "A": "amended", "B": "", "C": "corrected", "D": "entered-in-error",
    "F": "final", "I": "", "N": "",
    "O": "", "P": "preliminary", "R": "", "S": "", "V": "", "X": "cancelled", "U": "",
    "W": "entered-in-error",
}  # fmt: skip
TABLE_0123 = {
    "O": "registered", "I": "registered", "S": "registered", "A": "", "P": "preliminary",
    "C": "corrected", "R": "partial", "F": "final", "X": "cancelled", "Y": "", "Z": "", "M": "", "N": "",
}  # fmt: skip
# What is registered or partial for a report is preliminary for the entries that came.
WEAKER = {"registered": "preliminary", "partial": "preliminary", "": "preliminary"}


def message(entry, report="F"):
    return f"MSH|^~\\&|||||2026||ORU^R01|M|P|2.8\rOBR|1||F1||||2026{'|' * 18}{report}\r{entry}\r"


@pytest.mark.parametrize(("letter", "target"), TABLE_0085.items())
def test_entry_status_follows_table_0085(letter, target):
    record = read_message(message(f"OBX|1|ST|X||a||||||{letter}")).records[0]
    if letter == "N":  # no status, and dataAbsentReason not-asked (segment map, OBX-11)
        assert record.fields["X"].status == "not-asked"
        return
    assert record.fields["X"].status == (target or "preliminary")
    assert (letter in ENTRY_STATUS) is bool(target)
    assert any(i.rule == "hl7-entry-status-without-counterpart" for i in record.issues) is not bool(target)


@pytest.mark.parametrize(("letter", "target"), TABLE_0123.items())
def test_report_status_follows_table_0123(letter, target):
    record = read_message(message("OBX|1|ST|X||a||||||F", letter)).records[0]
    expected = "" if letter in "YZ" else WEAKER.get(target, target)  # Y and Z: "IF NOT MAPPED ERROR"
    assert record.header.status == expected
    assert (letter in REPORT_STATUS) is (
        target in ("final", "preliminary", "corrected", "cancelled", "partial")
    )
    assert any(i.is_error for i in record.issues) is (letter in "YZ")


# Segment map OBX[Observation], rows of OBX-5: OBX-2, an instance, and the element of Observation named there.
ELEMENT = {
    Amount: "valueQuantity", Decimal: "valueQuantity", Coded: "valueCodeableConcept", Span: "valueRange",
    str: "valueString",
}  # fmt: skip


@pytest.mark.parametrize(
    ("kind", "raw", "element"),
    [
        ("NM", "1.5", "valueQuantity"),
        ("ST", "a", "valueString"), ("FT", "a", "valueString"), ("TX", "a", "valueString"),
        ("CF", "a^b", "valueCodeableConcept"), ("CNE", "a^b", "valueCodeableConcept"),
        ("CE", "a^b", "valueCodeableConcept"), ("CWE", "a^b", "valueCodeableConcept"),
        ("IS", "a", "valueCodeableConcept"),
        ("NR", "1^2", "valueRange"),
        ("SN", "<>^1", "valueString"),  # OBX-5.1 EQUALS "<>"
        ("SN", "^1^-^2", "valueRange"),  # OBX-5.3 EQUALS "-"
        ("SN", "^1^+", "valueString"),  # OBX-5.3 EQUALS "+"
        ("SN", "<^1", "valueQuantity"),  # OBX-5.3 NOT IN (":", "/", "-", "+")
        ("SN", "nonsense", "valueString"),  # "If line 19 through 23 all fail"
    ],
)  # fmt: skip
def test_value_types_follow_the_segment_map(kind, raw, element):
    record = read_message(message(f"OBX|1|{kind}|X||{raw}|cm|||||F")).records[0]
    (value,) = record.fields["X"].values
    assert ELEMENT[type(value)] == element


@pytest.mark.parametrize(("kind", "raw", "text"), [("SN", "^1^:^128", "1:128"), ("SN", "^3^/^6", "3/6")])
def test_ratios_stay_in_their_written_form(kind, raw, text):
    """The guide says Ratio; murmur grades are written so and are no ratios, so the written form is kept."""
    assert read_message(message(f"OBX|1|{kind}|X||{raw}||||||F")).records[0].fields["X"].values == (text,)


@pytest.mark.parametrize("kind", ["NA", "ED", "EI", "RP"])
def test_types_without_an_answer_are_named(kind):
    record = read_message(message(f"OBX|1|{kind}|X||a||||||F")).records[0]
    assert [i.rule for i in record.issues] == ["hl7-value-type-not-read"]
