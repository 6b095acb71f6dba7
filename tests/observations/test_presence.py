"""Absent, uncertain, not examined and could-not-be-examined are four different outputs."""

from __future__ import annotations

import pytest

from fhirgallop.exam.entry import Entry
from fhirgallop.exam.presence import Presence

PRESENT = ("http://snomed.info/sct", "52101004")
ABSENT = ("http://snomed.info/sct", "2667000")


def first_coding(concept):
    return (concept["coding"][0]["system"], concept["coding"][0]["code"])


# finding, presence, value, absence reason, interpretation
TABLE = [
    ("murmur.diastolic", Presence.PRESENT, PRESENT, None, "A"),
    ("murmur.diastolic", Presence.ABSENT, ABSENT, None, "N"),
    ("murmur.diastolic", Presence.UNCERTAIN, "presence:uncertain", None, "IND"),
    ("murmur.diastolic", Presence.NOT_EXAMINED, None, "not-performed", None),
    ("murmur.diastolic", Presence.NOT_EXAMINABLE, None, "unsupported", None),
    # a third sound may be physiological: no interpretation is made up
    ("heart-sound.s3", Presence.PRESENT, PRESENT, None, None),
    ("heart-sound.s3", Presence.ABSENT, ABSENT, None, None),
]


@pytest.mark.parametrize(("finding", "presence", "value", "reason", "interpretation"), TABLE)
def test_truth_table(coded, finding, presence, value, reason, interpretation):
    made = coded([Entry(finding, presence)])[finding]
    concept = made.get("valueCodeableConcept")
    if isinstance(value, tuple):
        assert first_coding(concept) == value
    elif value:
        assert [c["code"] for c in concept["coding"]] == [value]
    else:
        assert concept is None
    absent = made.get("dataAbsentReason")
    assert (absent["coding"][0]["code"] if absent else None) == reason
    shown = made.get("interpretation")
    assert (shown[0]["coding"][0]["code"] if shown else None) == interpretation


def test_the_five_outputs_differ(coded):
    made = [coded([Entry("murmur.diastolic", presence)])["murmur.diastolic"] for presence in Presence]
    kept = [{k: m.get(k) for k in ("valueCodeableConcept", "dataAbsentReason")} for m in made]
    assert len({str(k) for k in kept}) == len(Presence)


def test_what_was_not_recorded_is_not_there(coded):
    assert "murmur.diastolic" not in coded([Entry("murmur")])


def test_the_reason_is_told_and_escaped(coded):
    made = coded()["jvp.visible"]
    assert made["dataAbsentReason"]["text"] == "Could not be examined: dressing & line <neck>"
    assert "dressing &amp; line &lt;neck&gt;" in made["text"]["div"]


@pytest.mark.parametrize("presence", [p for p in Presence if p is not Presence.PRESENT])
def test_a_broader_code_is_only_said_of_what_is_present(coded, presence):
    """No tumour plop does not mean no abnormal heart sounds."""
    made = coded([Entry("heart-sound.tumour-plop", presence)])["heart-sound.tumour-plop"]
    assert [c["system"] for c in made["code"]["coding"]] == [
        "https://fhirgallop.org/fhir/CodeSystem/findings"
    ]
    present = coded([Entry("heart-sound.tumour-plop")])["heart-sound.tumour-plop"]
    assert first_coding(present["code"]) == ("http://snomed.info/sct", "123824001")
