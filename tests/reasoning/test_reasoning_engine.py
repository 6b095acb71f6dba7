"""Staleness, disagreement, conflict sets, what to ask next, what changed: each on a small patient."""

from __future__ import annotations

import json
from collections.abc import Callable
from decimal import Decimal
from typing import Any

import pytest

from fhirgallop.reasoning.likelihood import Pretest
from fhirgallop.reasoning.review import Settings
from fhirgallop.reasoning.rulebook import load, with_site

Make = Callable[..., Any]
S4 = {"id": "heart-sound.s4", "with": {"chamber": "left"}}
PARADOX = {"id": "pressure.paradoxical-fall"}
VEINS = {"id": "jvp.level", "answer": "elevated"}
AF_ECG = {"id": "rhythm.diagnosis", "answer": "atrial-fibrillation", "from": "ecg", "age": "1 h"}

REVIEW_KEYS = [
    "urgent", "contradictions", "prerequisites", "companions", "explanations", "notes", "limits", "open",
    "silenced", "conflicts", "changes", "likelihoods", "repair", "next_datum", "disagreements", "unusable",
    "rules_version", "notice",
]  # fmt: skip
SITE = """\
rules:
  - id: site.{name}
    row: SITE-1
    relation: contradicts
    finding: heart-sound.s3
    other: {other}
    strength: hard
    tier: T2
    source: a made-up rule for a test
    seen: practice
    confidence: low
    mechanism: Made up.
    wording: Unusual together; listen again?
"""


def test_one_root_is_said_once_and_what_was_merged_is_kept(made: Make) -> None:
    found = made([S4], [AF_ECG]).review()
    assert [c.rule.id for c in found.raised] == ["s4.in-atrial-fibrillation"]
    assert [(c.rule.id, c.merged_into) for c in found.silenced] == [
        ("s4.needs-atrial-contraction", "s4.in-atrial-fibrillation")
    ]
    assert [c.outcome for c in found.prerequisites if c.rule.id == "s4.needs-atrial-contraction"] == ["unmet"]


def test_conclusions_carry_source_time_and_age(made: Make) -> None:
    shown = made([S4], [AF_ECG]).review().contradictions[0].as_dict()
    assert [(g["id"], g["source"], g["age"]) for g in shown["grounds"]] == [("rhythm.diagnosis", "ecg", 3600)]
    assert shown["subject"][0]["qualifiers"] == [{"axis": "chamber", "value": "left"}]
    assert shown["source"]["seen"] == "excerpt"


def test_cutoffs_are_shown_with_their_source_and_alternatives(made: Make) -> None:
    chart = [
        {"id": "catheter.lv-end-diastolic-pressure", "value": "14 mm[Hg]", "from": "catheter", "age": "2 h"}
    ]
    shown = next(c.as_dict() for c in made([S4], chart).review().companions if "end-diastolic" in c.rule.id)
    assert shown["outcome"] == "missing"
    assert shown["cutoffs"][0]["value"] == "16"
    assert {a["value"] for a in shown["cutoffs"][0]["alternatives"]} == {"12", "15", "17"}


def test_a_site_chooses_another_cutoff(made: Make) -> None:
    book, issues = with_site("choose: {lvedp-raised: '12 mm[Hg]'}", "site.yaml")
    assert not issues
    chart = [
        {"id": "catheter.lv-end-diastolic-pressure", "value": "14 mm[Hg]", "from": "catheter", "age": "2 h"}
    ]
    found = made([S4], chart).review(rules=book)
    assert [c.outcome for c in found.companions if "raised" in c.rule.id] == ["confirmed"]
    assert found.rules_version != made([S4], chart).review().rules_version


def test_every_agreeing_source_makes_a_conflict_set(made: Make) -> None:
    chart = [
        AF_ECG,
        {"id": "rhythm.diagnosis", "answer": "atrial-fibrillation", "from": "monitor", "age": "50 min"},
    ]
    found = made([S4], chart).review()
    assert [[item.source.value for item in c.items] for c in found.conflicts] == [
        ["exam", "ecg"],
        ["exam", "monitor"],
    ]
    assert [(look.item.id, look.cost, look.settles) for look in found.repair.looks] == [
        ("heart-sound.s4", 2, 2)
    ]
    assert found.repair.exact


def test_the_cheapest_look_is_taken_from_the_cost_table(made: Make) -> None:
    """Cost table of the evidence: ask 1, listen again 2, rhythm strip 3, echocardiogram 8, catheter 20."""
    book, _ = with_site(SITE.format(name="a", other="{fact: condition.heart-failure}"), "site.yaml")
    third = {"id": "heart-sound.s3"}
    problem = {"id": "condition.heart-failure", "from": "problem-list", "age": "30 d"}
    looks = made([third], [problem]).review(rules=book).repair.looks
    assert [(look.item.id, look.cost) for look in looks] == [("condition.heart-failure", 1)]
    book, _ = with_site(SITE.format(name="b", other="{fact: echo.lvef, at-least: 55 %}"), "site.yaml")
    echo = {"id": "echo.lvef", "value": "60 %", "from": "echo", "age": "2 d"}
    looks = made([third], [echo]).review(rules=book).repair.looks
    assert [(look.item.id, look.cost) for look in looks] == [("heart-sound.s3", 2)]


def test_weak_conflicts_make_no_conflict_set(made: Make) -> None:
    chart = [{"id": "lesion.mitral-stenosis", "from": "echo", "age": "60 d", "with": {"severity": "severe"}}]
    found = made([S4], chart).review()
    assert found.contradictions
    assert found.conflicts == ()
    assert found.repair.looks == ()


def test_staleness_steps_down_and_never_interrupts(made: Make) -> None:
    def strengths(age: str) -> list[tuple[str, str]]:
        chart = [{"id": "lesion.mitral-stenosis", "from": "echo", "age": age, "with": {"severity": "severe"}}]
        return [(c.strength.value, c.tier.value) for c in made([S4], chart).review().contradictions]

    assert strengths("60 d") == [("moderate", "T2")]
    assert strengths("3 a") == [("weak", "T3")]


def test_low_trust_costs_a_step(made: Make) -> None:
    found = made([S4], [{**AF_ECG, "low-trust": True}]).review()
    assert [(c.strength.value, c.tier.value) for c in found.contradictions] == [("moderate", "T2")]
    assert found.conflicts == ()


def test_sources_that_disagree_are_both_said_and_neither_used(made: Make) -> None:
    chart = [AF_ECG, {"id": "rhythm.diagnosis", "answer": "sinus-rhythm", "from": "monitor", "age": "1 h"}]
    found = made([S4], chart).review()
    assert found.raised == ()
    assert [[item.source.value for item in group] for group in found.disagreements] == [["ecg", "monitor"]]


def test_ten_thousand_facts_of_one_id(made: Make) -> None:
    many = [{**AF_ECG, "age": f"{n % 50} min"} for n in range(5000)]
    other = {"id": "rhythm.diagnosis", "answer": "sinus-rhythm", "from": "monitor"}
    many += [{**other, "age": f"{n % 50} min", "encounter": "e-1"} for n in range(5000)]
    found = made([S4], many).review()
    assert found.raised == ()
    assert found.disagreements
    found = made([S4], many[:5000]).review()
    assert [c.rule.id for c in found.raised] == ["s4.in-atrial-fibrillation"]
    assert [look.item.id for look in found.repair.looks] == ["heart-sound.s4"]


def test_a_future_fact_and_a_number_in_another_unit_are_unusable(made: Make) -> None:
    chart = [
        {**AF_ECG, "time": "2027-01-01T10:00:00+01:00", "age": "0 h"},
        {"id": "echo.mitral-valve-area", "value": "120 mm", "from": "echo", "age": "2 d"},
    ]
    del chart[0]["age"]
    found = made([S4], chart).review()
    assert found.raised == ()
    assert {item.id for item in found.unusable} == {"rhythm.diagnosis", "echo.mitral-valve-area"}


def test_the_next_datum_settles_most_open_questions(made: Make) -> None:
    found = made([S4], []).review()
    assert found.next_datum is not None
    assert found.next_datum.id == "rhythm.diagnosis"
    assert {"s4.in-atrial-fibrillation", "s4.needs-atrial-contraction"} <= set(found.next_datum.settles)
    assert found.next_datum.action == "record a rhythm strip"


def test_an_unrecorded_side_is_asked_for(made: Make) -> None:
    chart = [{"id": "lesion.mitral-stenosis", "from": "echo", "age": "60 d", "with": {"severity": "severe"}}]
    found = made(
        [{"id": "heart-sound.s4"}, {"id": "rhythm.diagnosis", "answer": "sinus-rhythm"}], chart
    ).review()
    asked = {c.rule.id: c.unknown for c in found.open}
    assert asked["s4.in-mitral-stenosis"] == ("heart-sound.s4#chamber",)


def test_changes_need_both_examinations_to_have_looked(made: Make) -> None:
    earlier = [
        {"id": "heart-sound.s4", "from": "earlier-exam", "age": "6 mo"},
        {"id": "heart-sound.s3", "is": "absent", "from": "earlier-exam", "age": "6 mo"},
        {"id": "heart-sound.s3", "from": "earlier-exam", "age": "24 mo"},
        {"id": "lung.crackles", "is": "uncertain", "from": "earlier-exam", "age": "6 mo"},
    ]
    today = [
        {"id": "heart-sound.s4", "is": "absent"},
        {"id": "heart-sound.s3"},
        {"id": "lung.crackles"},
        {"id": "murmur"},
    ]
    found = made(today, earlier).review().changes
    assert [(c.now.id, c.kind) for c in found] == [("heart-sound.s3", "appeared"), ("heart-sound.s4", "gone")]


def test_the_review_is_plain_json_and_always_the_same(made: Make) -> None:
    case = made([S4, {"id": "vital.heart-rate", "value": "110 /min"}], [AF_ECG])
    once, again = (json.dumps(case.review().as_dict()) for _ in range(2))
    assert once == again
    assert list(json.loads(once)) == REVIEW_KEYS


def test_an_urgent_combination_shows_the_fixed_phrase_and_its_entries(made: Make) -> None:
    site = """\
rules:
  - id: site.low-pressure-and-raised-veins
    row: SITE-2
    relation: suggests
    finding: {fact: pressure.systolic, below: 100 mm[Hg]}
    other: {fact: jvp.level, answer: [elevated]}
    strength: strong
    tier: U
    source: a made-up rule that would name a diagnosis
    seen: practice
    confidence: low
    mechanism: Names a diagnosis.
"""
    site = site.replace("100 mm[Hg]", '"100 mm[Hg]"')
    book, issues = with_site(site, "site.yaml")
    assert not issues
    low = {"id": "pressure.systolic", "value": "94 mm[Hg]"}
    found = made([low, VEINS], []).review(rules=book)
    shown = json.dumps([c.as_dict() for c in found.urgent])
    assert [c.text for c in found.urgent] == ["urgent clinical review"]
    assert "diagnosis" not in shown
    assert "94" in shown
    # A machine-read part is not enough, but it is asked for.
    doubtful = {**VEINS, "from": "monitor", "age": "1 h", "low-trust": True}
    found = made([low], [doubtful]).review(rules=book)
    assert found.urgent == ()
    assert ("site.low-pressure-and-raised-veins", ("jvp.level",)) in [
        (c.rule.id, c.unknown) for c in found.open
    ]
    # One part unknown, or only said in the chart of yesterday: nothing is shown, but it is asked for.
    found = made([low], [{**VEINS, "from": "report", "age": "30 h"}]).review(rules=book)
    assert found.urgent == ()
    assert found.next_datum is not None
    assert found.next_datum.id == "jvp.level"


# Worked values: section 3.3 of the evidence file (post-test odds = pretest odds x ratio).
@pytest.mark.parametrize(
    ("finding", "target", "population", "pretest", "expected"),
    [
        ({"id": "heart-sound.s3"}, "heart-failure", "emergency-dyspnoea", "0.30", ("82.5", "67.7", "91.5")),
        ({"id": "heart-sound.s3", "is": "absent"}, "heart-failure", "emergency-dyspnoea", "0.30", ("27.4",)),
        ({**PARADOX, "value": "11 mm[Hg]"}, "tamponade", "known-effusion", "0.50", ("76.7",)),
        ({**PARADOX, "value": "8 mm[Hg]"}, "tamponade", "known-effusion", "0.50", ("2.9",)),
    ],
)  # fmt: skip
def test_likelihood_ratios_reproduce_the_worked_values(
    made: Make, finding: dict[str, Any], target: str, population: str, pretest: str, expected: tuple[str, ...]
) -> None:
    settings = Settings({target: Pretest(Decimal(pretest), population)})
    first = made([finding], []).review(settings=settings).likelihoods[0]
    given = (first.probability, first.low, first.high)
    assert tuple(str((value * 100).quantize(Decimal("0.1"))) for value in given[: len(expected)]) == expected


def test_an_interval_that_spans_one_is_refused(made: Make) -> None:
    settings = Settings({"heart-failure": Pretest(Decimal("0.3"), "emergency-dyspnoea")})
    found = {x.row.id: x for x in made([S4], []).review(settings=settings).likelihoods}
    refused = found["lr.fourth-sound-heart-failure"]
    assert refused.probability is None
    assert "spans 1" in refused.refused


def test_a_ratio_is_refused_outside_its_population(made: Make) -> None:
    settings = Settings({"heart-failure": Pretest(Decimal("0.3"), "primary-care")})
    for found in made([{"id": "heart-sound.s3"}], []).review(settings=settings).likelihoods:
        assert found.probability is None
        assert "another population" in found.refused


def test_without_a_pretest_value_there_is_no_probability(made: Make) -> None:
    assert made([{"id": "heart-sound.s3"}], []).review().likelihoods == ()


def test_correlated_findings_stay_apart(made: Make) -> None:
    settings = Settings({"heart-failure": Pretest(Decimal("0.3"), "emergency-dyspnoea")})
    both = made([{"id": "heart-sound.s3"}, {"id": "lung.crackles"}], []).review(settings=settings).likelihoods
    one = made([{"id": "heart-sound.s3"}], []).review(settings=settings).likelihoods
    assert [x.probability for x in both if x.row.id == one[0].row.id] == [one[0].probability]
    assert len([x for x in both if x.probability is not None]) == 2


def test_all_published_ratios_are_there_or_left_out_with_a_reason() -> None:
    book = load()
    assert len(book.likelihoods) >= 38
    assert sum(name.startswith("LR ") for name in book.left_out) == 4
    assert len({row.id for row in book.likelihoods}) == len(book.likelihoods)


@pytest.mark.parametrize(
    ("recorded", "asked", "is_open"),
    [
        ({"id": "heart-sound.prosthetic", "answer": "muffled"},
         "{not: {fact: heart-sound.prosthetic, answer: [crisp], with: {valve: [aortic]}}}", True),
        ({"id": "heart-sound.prosthetic", "answer": "muffled", "with": {"valve": "aortic"}},
         "{not: {fact: heart-sound.prosthetic, answer: [crisp], with: {valve: [aortic]}}}", False),
        ({"id": "murmur.systolic", "with": {"timing": "mid-systolic"}},
         "{not: {fact: murmur.systolic, with: {timing: [holosystolic], site: [left-sternal-border]}}}", True),
        ({"id": "murmur.systolic", "is": "absent"},
         "{fact: murmur.systolic, is: absent, with: {site: [left-sternal-border]}}", False),
        ({"id": "murmur.systolic"},
         "{not: {fact: murmur.systolic, is: absent, with: {site: [left-sternal-border]}}}", True),
    ],
)  # fmt: skip
def test_what_may_be_about_another_valve_or_site_decides_nothing(
    made: Make, recorded: dict[str, Any], asked: str, is_open: bool
) -> None:
    """An absence without a place is said of every place; a presence is not."""
    book, issues = with_site(SITE.format(name="other-valve", other=asked), "site.yaml")
    assert not issues
    found = made([{"id": "heart-sound.s3"}, recorded], []).review(rules=book)
    ours = [c.outcome for c in (*found.open, *found.contradictions) if c.rule.id == "site.other-valve"]
    assert ours == (["open"] if is_open else ["conflict"])


def test_nobody_is_asked_for_a_name_or_a_grade_that_was_not_given(made: Make) -> None:
    found = made([{"id": "murmur.systolic"}, {"id": "murmur.diastolic"}], []).review()
    asked = {datum for c in (*found.open, *found.companions) for datum in c.unknown}
    assert asked
    names = {"eponym", "meaning", "suspected-lesion"}
    assert not {d for d in asked if d.partition("#")[2] in names or d.startswith("subject.")}


def test_a_rule_that_may_not_apply_asks_nothing(made: Make) -> None:
    """No chart says "no prosthesis", so a muffled click in nobody's chart is not worth the one line."""
    found = made([{"id": "murmur.systolic", "with": {"timing": "holosystolic"}}], []).review()
    assert found.next_datum is None or not found.next_datum.id.startswith(("device.", "procedure."))


@pytest.mark.parametrize(
    ("person", "silent"),
    [
        ([{"id": "patient.age-category", "answer": "infant"}], True),
        ([{"id": "patient.age-category", "answer": "adult"}], False),
        ([{"id": "patient.age-category", "answer": "adolescent"}, {"id": "patient.age", "value": "19 a"}],
         False),
    ],
)  # fmt: skip
def test_an_age_band_makes_a_child_where_no_age_is_known(
    made: Make, person: list[dict[str, Any]], silent: bool
) -> None:
    low = [{"id": "vital.temperature", "value": "38.5 Cel"}]
    chart = [{"id": "device.prosthetic-valve", "answer": "mechanical", "with": {"valve": "aortic"}}, *person]
    raised = [c.rule.id for c in made(low, chart).review().raised]
    assert raised == ([] if silent else ["prosthesis.fever"])


def test_a_ratio_of_the_ear_is_not_used_for_a_tracing(made: Make) -> None:
    settings = Settings({"heart-failure": Pretest(Decimal("0.3"), "emergency-dyspnoea")})
    heard = {"id": "heart-sound.s3", "with": {"method": "auscultation-bell"}}
    traced = {"id": "heart-sound.s3", "with": {"method": "phonocardiography"}}
    for entry, refused in ((heard, False), (traced, True)):
        found = {x.row.id: x for x in made([entry], []).review(settings=settings).likelihoods}
        one = found["lr.third-sound-heart-failure"]
        assert (one.probability is None) is refused
        assert ("tracing" in one.refused) is refused
