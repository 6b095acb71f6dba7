"""Entries as Observations: codes, components, numbers, panels, words."""

from __future__ import annotations

from dataclasses import replace
from decimal import Decimal

from fhirgallop.codes import fhirjson
from fhirgallop.exam.entry import Entry, Measure, Qualifier
from fhirgallop.exam.moment import Moment

FINDINGS = "https://fhirgallop.org/fhir/CodeSystem/findings"


def codes(concept):
    return [(c["system"], c["code"]) for c in concept["coding"]]


def test_the_fourth_heart_sound_has_its_exact_code_and_the_ontology_term(coded):
    made = coded()["heart-sound.s4"]
    assert codes(made["code"]) == [
        ("http://snomed.info/sct", "4592006"),
        ("http://human-phenotype-ontology.org", "HP:0031659"),
        (FINDINGS, "heart-sound.s4"),
    ]
    assert made["code"]["text"] == "Fourth heart sound"


def test_a_broader_code_is_told_apart_by_text_ontology_and_own_code(coded):
    value = coded()["heart-sound.s1-intensity"]["valueCodeableConcept"]
    assert codes(value)[:2] == [
        ("http://snomed.info/sct", "76310001"),
        ("http://human-phenotype-ontology.org", "HP:0031660"),
    ]
    assert value["text"] == "Loud"


def test_attributes_of_a_murmur_are_components(coded):
    made = coded()["murmur.systolic"]
    shown = [
        (c["code"]["coding"][-1]["code"], c.get("valueCodeableConcept", c.get("dataAbsentReason"))["text"])
        for c in made["component"]
    ]
    assert shown == [
        ("grade", "2-3/6"),
        ("response.valsalva", "Softer"),
        ("response.handgrip", "Not done"),
        ("site", "Aortic area (2nd right intercostal space)"),
        ("site", "Mitral area (apex)"),
        ("timing", "Mid-systolic (ejection)"),
    ]


def test_a_manoeuvre_not_done_has_no_value(coded):
    part = coded()["murmur.systolic"]["component"][2]
    assert part["dataAbsentReason"]["coding"][0]["code"] == "not-performed"
    assert "valueCodeableConcept" not in part


def test_blood_pressure_is_one_observation_of_two_parts(coded):
    made = coded()
    assert "pressure.systolic" not in made
    parts = made["vital.blood-pressure"]["component"]
    assert [p["code"]["coding"][1]["code"] for p in parts] == ["8480-6", "8462-4"]
    assert [p["valueQuantity"]["value"] for p in parts] == [Decimal("120.0"), Decimal(84)]
    assert made["vital.blood-pressure"]["note"] == [{"text": "Sent as 16.0 kPa."}]


def test_a_missing_diastolic_pressure_is_said_not_dropped(coded):
    systolic = Entry("pressure.systolic", measure=Measure(Decimal(120), "mm[Hg]"))
    parts = coded([systolic])["vital.blood-pressure"]["component"]
    assert [p["code"]["coding"][1]["code"] for p in parts] == ["8480-6", "8462-4"]
    assert parts[1]["dataAbsentReason"]["coding"][0]["code"] == "unknown"


def test_a_part_of_a_panel_that_was_taken_back_leaves_it(coded):
    systolic = Entry("pressure.systolic", measure=Measure(Decimal(120), "mm[Hg]"), withdrawn=True)
    diastolic = Entry("pressure.diastolic", measure=Measure(Decimal(84), "mm[Hg]"))
    made = coded([systolic, diastolic])["vital.blood-pressure"]
    assert made["status"] == "final"
    assert made["component"][0]["dataAbsentReason"]["coding"][0]["code"] == "unknown"
    assert made["component"][1]["valueQuantity"]["value"] == Decimal(84)
    assert "120" not in made["text"]["div"]
    both = coded([systolic, replace(diastolic, withdrawn=True)])["vital.blood-pressure"]
    assert both["status"] == "entered-in-error"
    assert both["component"][0]["valueQuantity"]["value"] == Decimal(120)


def test_numbers_keep_their_digits_to_the_byte(coded):
    text = fhirjson.write(coded(bundle=True))
    assert b'"value":120.0,' in text
    assert b'"high":{"value":4.50,' in text


def test_limits_and_ranges(coded):
    made = coded()
    assert made["echo.lvef"]["valueQuantity"]["comparator"] == ">"
    low, high = made["jvp.height"]["valueRange"]["low"], made["jvp.height"]["valueRange"]["high"]
    assert (low["value"], high["value"], low["code"]) == (Decimal(3), Decimal("4.50"), "cm")


def test_several_answers_are_several_observations(coded, exam):
    entry = Entry("ecg.av-conduction", answers=("first-degree", "second-degree"))
    bundle = coded([entry], bundle=True)
    values = [
        e["resource"]["valueCodeableConcept"]["coding"][-1]["code"]
        for e in bundle["entry"]
        if "valueCodeableConcept" in e["resource"]
    ]
    assert len(values) == len(set(values)) == 2


def test_without_snomed_the_own_code_system_carries_the_meaning(coded):
    bundle = coded(bundle=True, snomed=False)
    assert b"snomed" not in fhirjson.write(bundle)
    for entry in bundle["entry"]:
        if entry["resource"]["resourceType"] == "Observation":
            assert FINDINGS in [c["system"] for c in entry["resource"]["code"]["coding"]]


def test_local_words_are_kept_where_the_map_names_their_system(coded):
    made = coded(local_system="https://fernwood.example/form")["heart-sound.s4"]
    assert codes(made["code"])[-1] == ("https://fernwood.example/form", "s4")
    local = made["valueCodeableConcept"]["coding"][-1]
    assert (local["system"], local["code"], local["userSelected"]) == (
        "https://fernwood.example/form",
        "yes",
        True,
    )


def test_a_time_coarser_than_a_day_is_a_period(coded):
    made = coded(time=Moment("2015-06", "2015-07"))
    assert made["vital.heart-rate"]["effectivePeriod"] == {"start": "2015-06", "end": "2015-07"}
    assert coded(time=Moment("2015"))["murmur"]["effectivePeriod"] == {"start": "2015", "end": "2015"}
    assert coded(time=Moment("2015-06-03"))["murmur"]["effectiveDateTime"] == "2015-06-03"


def test_an_entry_may_have_its_own_time(coded):
    made = coded([Entry("murmur", time="2026-11-29T08:00:00Z")])["murmur"]
    assert made["effectiveDateTime"] == "2026-11-29T08:00:00Z"


def test_words_of_the_record_cannot_become_markup(coded):
    made = coded([Entry("heart.narrative", text="<script>alert(1)</script> & \x07bell")])["heart.narrative"]
    assert made["valueString"] == "<script>alert(1)</script> & bell"
    assert "<script>" not in made["text"]["div"]


def test_free_words_of_a_qualifier_travel_as_text(coded):
    entry = Entry("murmur.systolic", qualifiers=(Qualifier("quality", text="like a dove"),))
    part = coded([entry])["murmur.systolic"]["component"][0]
    assert part["valueCodeableConcept"] == {"text": "like a dove"}


def test_a_withdrawn_entry_is_entered_in_error(coded, exam):
    entries = [replace(e, withdrawn=True) if e.finding == "heart-sound.s4" else e for e in exam.entries]
    made = coded(entries)
    assert made["heart-sound.s4"]["status"] == "entered-in-error"
    assert made["heart-sound.s3"]["status"] == "final"


def test_the_place_of_a_murmur_is_a_component_of_anything_else_the_body_site(coded):
    site = Qualifier("site", "aortic")
    made = coded([Entry("murmur", qualifiers=(site,)), Entry("thrill", qualifiers=(site,))])
    assert "bodySite" not in made["murmur"]
    assert codes(made["murmur"]["component"][0]["code"])[0] == ("http://loinc.org", "80282-7")
    assert made["thrill"]["bodySite"]["text"].startswith("Aortic area")
    assert "component" not in made["thrill"]
    assert "Aortic area" in made["thrill"]["text"]["div"]
