"""What we write has the shape of the published examples.

Source: examples of FHIR R4 (4.0.1), package hl7.fhir.r4.examples 4.0.1, CC0-1.0.
"""

from __future__ import annotations

import json
from datetime import UTC, datetime
from decimal import Decimal

import pytest

from fhirgallop.exam.catalogue import load
from fhirgallop.exam.entry import Entry, Measure
from fhirgallop.exam.exam import Exam, Party
from fhirgallop.exam.moment import Moment
from fhirgallop.exam.presence import Presence
from fhirgallop.observations.bundle import encode


def example(root, name):
    return json.loads((root / f"tests/cases/outside/hl7-r4-examples/Observation-{name}.json").read_text())


def ours(*entries):
    exam = Exam(Party("example", is_fhir_id=True), "1", "", Moment("2012-09-17"), entries)
    bundle = encode(exam, form="json", recorded=datetime(2026, 1, 1, tzinfo=UTC))
    return bundle["entry"][0]["resource"]


def pairs(concept):
    return {(c["system"], c["code"]) for c in concept["coding"]}


VITALS = [
    ("heart-rate", "vital.heart-rate", "/min"),
    ("body-height", "vital.height", "cm"),
]


@pytest.mark.parametrize(("name", "finding", "unit"), VITALS)
def test_vital_signs(root, name, finding, unit):
    published, made = example(root, name), ours(Entry(finding, measure=Measure(Decimal(44), unit)))
    assert pairs(published["code"]) <= pairs(made["code"])
    assert pairs(published["category"][0]) == pairs(made["category"][0])
    assert published["subject"] == made["subject"]
    assert published["valueQuantity"]["system"] == made["valueQuantity"]["system"]
    # height: the vital-sign profile takes cm or [in_i]; we always write the catalogue's unit
    assert made["valueQuantity"]["code"] == unit
    assert len(made["effectiveDateTime"]) >= len("2012-09-17")


@pytest.mark.parametrize("name", ["blood-pressure", "blood-pressure-dar"])
def test_blood_pressure(root, name):
    published = example(root, name)
    entries = [Entry("pressure.systolic", measure=Measure(Decimal(107), "mm[Hg]"))]
    if name == "blood-pressure":
        entries.append(Entry("pressure.diastolic", measure=Measure(Decimal(60), "mm[Hg]")))
    else:
        entries.append(Entry("pressure.diastolic", Presence.NOT_EXAMINED))
    made = ours(*entries)
    assert pairs(published["code"]) <= pairs(made["code"])
    assert pairs(published["category"][0]) == pairs(made["category"][0])
    assert published["identifier"][0]["system"] == made["identifier"][0]["system"]
    for theirs, mine in zip(published["component"], made["component"], strict=True):
        loinc = {pair for pair in pairs(theirs["code"]) if pair[0] == "http://loinc.org"}
        assert loinc <= pairs(mine["code"])
        if "valueQuantity" in theirs:
            assert theirs["valueQuantity"]["code"] == mine["valueQuantity"]["code"]
            assert theirs["valueQuantity"]["value"] == mine["valueQuantity"]["value"]
        else:
            assert pairs(theirs["dataAbsentReason"]) <= pairs(mine["dataAbsentReason"])


def test_a_finding_of_the_examination(root):
    """The example confirms by a boolean; we by a coded value, which can also say uncertain."""
    published, made = example(root, "abdo-tender"), ours(Entry("thrill"))
    assert pairs(published["category"][0]) == pairs(made["category"][0])
    assert published["code"]["text"]
    assert made["code"]["text"]
    assert pairs(published["interpretation"][0]) == pairs(made["interpretation"][0])
    assert published["valueBoolean"] is True
    assert ("http://snomed.info/sct", "52101004") in pairs(made["valueCodeableConcept"])


def test_every_magic_code_of_the_vital_sign_profile_is_ours():
    """Source: FHIR R4 "Vital Signs Profile", table of required codes and units."""
    required = {
        "8867-4": "/min", "9279-1": "/min", "2708-6": "%", "8310-5": "Cel", "8302-2": "cm", "29463-7": "kg",
        "39156-5": "kg/m2", "8480-6": "mm[Hg]", "8462-4": "mm[Hg]",
    }  # fmt: skip
    units = {
        coding.code: finding.unit
        for finding in load().findings.values()
        for coding in finding.codings
        if finding.category == "vital-signs"
    }
    assert {code: units.get(code) for code in required} == required
