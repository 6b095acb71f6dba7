"""The acknowledgement of a message."""

from __future__ import annotations

import pytest

from fhirgallop.intake.hl7_ack import ack
from fhirgallop.intake.hl7v2 import read_message
from fhirgallop.outcome import Issue


def answered(message, moment, issues=None):
    reading = read_message(message)
    issues = [*reading.issues, *(i for r in reading.records for i in r.issues)] if issues is None else issues
    text = ack(message, issues, control_id="A-1", now=moment).decode()
    return [segment.split("|") for segment in text.strip("\r").split("\r")]


def test_a_good_message_is_accepted_and_sender_and_receiver_change_places(oru, moment):
    msh, msa = answered(oru(), moment)
    assert msh[2:6] == ["CODER", "FERNWOOD", "FORM", "FERNWOOD"]
    assert msh[6] == "20261201083000+0000"
    assert msh[8:12] == ["ACK^R01^ACK", "A-1", "P", "2.5.1"]
    assert msa == ["MSA", "AA", "M-1"]


def test_the_answer_names_the_event_that_it_answers(oru, moment):
    other = answered(oru(MSH="MSH|^~\\&|||||20260314||ADT^A01^ADT_A01|M-1|P|2.5.1"), moment)
    assert other[0][8] == "ACK^A01^ACK"


def test_what_is_no_message_is_answered_without_event_and_with_the_marks_of_the_version_named(moment):
    msh, msa, *_ = answered("hello", moment)
    assert (msh[1], msh[8], msh[11]) == ("^~\\&", "ACK", "2.5.1")
    assert msa == ["MSA", "AR", ""]


def test_faults_in_the_data_are_an_application_error(oru, moment):
    segments = answered(oru("OBX|9|QQ|X||1||||||F"), moment)
    assert segments[1] == ["MSA", "AE", "M-1"]
    error = segments[2]
    assert error[0] == "ERR"
    assert error[3] == "103^hl7-unknown-value-type^HL70357"
    assert error[4] == "E"
    assert "OBX-2" in error[8]


@pytest.mark.parametrize(
    "change",
    [{"MSH": "MSH|^~\\&|||||20260314||ADT^A01|M-1|P|2.5.1"}, {"without": "MSH"}],
)
def test_what_is_no_result_message_is_rejected(oru, moment, change):
    assert answered(oru(**change), moment)[1][1] == "AR"


def test_separators_inside_of_words_are_escaped(oru, moment):
    issue = Issue("error", "value", "some-rule", "a|b^c&d~e\\f\ng")
    (_, _, error) = answered(oru(), moment, [issue])
    assert error[8] == r"a\F\b\S\c\T\d\R\e\E\f\.br\g"
