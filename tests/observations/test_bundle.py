"""The Bundle: stable, linked, told in words, and revised when the examination is sent again."""

from __future__ import annotations

from dataclasses import replace
from datetime import timedelta

import pytest

from fhirgallop.codes import fhirjson
from fhirgallop.exam.entry import Entry
from fhirgallop.exam.exam import Party
from fhirgallop.exam.presence import Presence
from fhirgallop.observations.identity import identity_of
from fhirgallop.observations.revision import draft_after_signed


def resources(bundle, kind):
    return [e["resource"] for e in bundle["entry"] if e["resource"]["resourceType"] == kind]


def statuses(bundle):
    return {(r["code"]["text"]): r["status"] for r in resources(bundle, "Observation")}


def test_the_same_examination_gives_the_same_bytes(coded):
    assert fhirjson.write(coded(bundle=True)) == fhirjson.write(coded(bundle=True))


def test_full_urls_are_unique_and_every_reference_resolves(coded):
    bundle = coded(bundle=True)
    urls = [entry["fullUrl"] for entry in bundle["entry"]]
    assert len(urls) == len(set(urls))
    (report,) = resources(bundle, "DiagnosticReport")
    panel = next(r for r in resources(bundle, "Observation") if "hasMember" in r)
    (trail,) = resources(bundle, "Provenance")
    members = [m["reference"] for m in panel["hasMember"]]
    assert report["result"][0]["reference"] in urls
    observed = {
        entry["fullUrl"]
        for entry in bundle["entry"]
        if entry["resource"]["resourceType"] == "Observation" and entry["resource"] is not panel
    }
    assert set(members) == observed
    assert [t["reference"] for t in trail["target"]] == urls[:-1]


def test_the_panel_has_no_value_of_its_own(coded):
    panel = coded()["exam.cardiovascular"]
    assert not [name for name in panel if name.startswith("value") or name == "dataAbsentReason"]


def test_each_request_updates_by_identity(coded):
    for entry in coded(bundle=True)["entry"][:-1]:
        kind, urn = entry["resource"]["resourceType"], identity_of(entry["resource"])
        assert entry["fullUrl"] == urn
        assert entry["request"] == {"method": "PUT", "url": f"{kind}?identifier=urn:ietf:rfc:3986|{urn}"}


def test_the_conversion_is_recorded_once(coded, moment):
    first = coded(bundle=True)["entry"][-1]
    again = coded(bundle=True, recorded=moment + timedelta(hours=1))["entry"][-1]
    assert first["request"] == again["request"]
    assert first["request"]["method"] == "POST"
    assert first["resource"]["meta"]["tag"][0]["code"] in first["request"]["ifNoneExist"]


def test_the_map_version_is_named(coded):
    (trail,) = resources(coded(bundle=True), "Provenance")
    assert "fernwood-heart-form|2026.1" in [e["what"]["identifier"]["value"] for e in trail["entity"]]


@pytest.mark.parametrize(
    "change",
    [
        {"patient": Party("P-2", "https://fernwood.example/patients")},
        {"patient": Party("P-1", "https://other.example/patients")},
        {"identifier": "E-2"},
    ],
)
def test_another_patient_or_examination_shares_no_identity(coded, change):
    mine = {e["fullUrl"] for e in coded(bundle=True)["entry"]}
    other = {e["fullUrl"] for e in coded(bundle=True, **change)["entry"]}
    assert not mine & other


def test_the_report_says_in_words_what_the_codes_say(coded):
    bundle = coded(bundle=True)
    (report,) = resources(bundle, "DiagnosticReport")
    div = report["text"]["div"]
    assert (
        "<li>Fourth heart sound: Present (Chamber: Left)</li>" in div or "Fourth heart sound: Present" in div
    )
    assert "<li>Third heart sound: Absent</li>" in div
    assert "<li>Opening snap: Uncertain</li>" in div
    assert "<li>Pericardial friction rub: Not examined</li>" in div
    assert "Patient tired." in div


def test_sent_again_unchanged_nothing_changes(coded, moment):
    first = coded(bundle=True)
    again = coded(bundle=True, earlier=first, recorded=moment + timedelta(hours=5))
    assert [e["resource"] for e in first["entry"][:-1]] == [e["resource"] for e in again["entry"][:-1]]


def test_changed_entries_are_amended_and_lost_ones_entered_in_error(coded, exam):
    first = coded(bundle=True)
    entries = [e for e in exam.entries if e.finding not in ("heart-sound.s4", "heart-sound.s3")]
    entries += [Entry("heart-sound.s3", Presence.PRESENT), Entry("thrill", Presence.ABSENT)]
    again = coded(entries, bundle=True, earlier=first)
    status = statuses(again)
    assert status["Fourth heart sound"] == "entered-in-error"
    assert status["Third heart sound"] == "amended"
    assert status["Thrill"] == "final"
    assert status["Systolic murmur"] == "final"
    assert [r["status"] for r in resources(again, "DiagnosticReport")] == ["amended"]


def test_what_is_taken_back_says_so_in_words_too(coded, exam):
    first = coded(bundle=True)
    entries = [e for e in exam.entries if e.finding != "heart-sound.s4"]
    later = coded(entries, bundle=True, earlier=first)
    again = coded(entries, bundle=True, earlier=later)
    for bundle in (later, again):
        (gone,) = [r for r in resources(bundle, "Observation") if r["status"] == "entered-in-error"]
        assert gone["text"]["div"].count("Entered in error: Fourth heart sound: Present") == 1
        assert "Fourth heart sound" not in resources(bundle, "DiagnosticReport")[0]["text"]["div"]
    whole = coded(bundle=True, status="entered-in-error")
    assert all("<p>Entered in error: " in e["resource"]["text"]["div"] for e in whole["entry"][:-1])


def test_a_corrected_examination_corrects(coded, exam):
    first = coded(bundle=True)
    entries = [
        replace(e, presence=Presence.ABSENT, qualifiers=()) if e.finding == "heart-sound.s4" else e
        for e in exam.entries
    ]
    status = statuses(coded(entries, bundle=True, earlier=first, status="corrected"))
    assert status["Fourth heart sound"] == "corrected"
    assert status["Third heart sound"] == "final"


@pytest.mark.parametrize("signed", ["final", "amended", "corrected"])
def test_a_draft_cannot_follow_the_signed_examination(coded, signed):
    earlier = coded(bundle=True, status=signed)
    assert draft_after_signed(earlier, "preliminary").is_error
    assert draft_after_signed(earlier, "final") is None
    assert draft_after_signed(coded(bundle=True, status="preliminary"), "preliminary") is None


def test_a_draft_that_is_signed_becomes_final(coded):
    draft = coded(bundle=True, status="preliminary")
    assert set(statuses(draft).values()) == {"preliminary"}
    signed = coded(bundle=True, status="final", earlier=draft)
    assert set(statuses(signed).values()) == {"final"}
