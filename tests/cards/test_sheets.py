"""The review sheet and the sheet to sign: calm wording, everything named, nothing that must not be said."""

from __future__ import annotations

import re
from collections.abc import Callable
from dataclasses import replace
from datetime import datetime
from decimal import Decimal
from typing import Any

import pytest

from fhirgallop.cards import words
from fhirgallop.cards.conditions import in_words
from fhirgallop.cards.memory import Memory
from fhirgallop.cards.policy import decide
from fhirgallop.cards.safety import SAFETY_TEXTS
from fhirgallop.cards.sheet import MAX_UNKNOWN, WIDTH, sheet
from fhirgallop.cards.signoff import rule_text, signoff_sheet
from fhirgallop.exam.context import Context, Fact, Source, State
from fhirgallop.exam.entry import Entry, Grade, Measure, Qualifier
from fhirgallop.exam.exam import Exam, Party
from fhirgallop.exam.moment import Moment
from fhirgallop.outcome import Issue
from fhirgallop.reasoning.items import collect
from fhirgallop.reasoning.review import review
from fhirgallop.reasoning.rulebook import load
from fhirgallop.reasoning.vocabulary import Tier

NOW = datetime.fromisoformat("2026-11-30T10:30:00+01:00")
S4 = Entry("heart-sound.s4", qualifiers=(Qualifier("chamber", "left"),))
AF = Fact(
    "rhythm.diagnosis", State.PRESENT, Source.ECG, ("atrial-fibrillation",), time="2026-11-30T09:40:00+01:00",
    reference="Observation/7",
)  # fmt: skip


def text_of(entries: tuple[Entry, ...], facts: tuple[Fact, ...]) -> str:
    exam = Exam(Party("p"), "x", "", Moment("2026-11-30T10:00:00+01:00"), entries)
    found = review(exam, Context(NOW, facts))
    return sheet(exam, found, decide(found, Memory("p"), encounter="e", now=NOW))


def test_the_sheet_of_a_conflict() -> None:
    text = text_of((S4,), (AF,))
    flat = " ".join(text.split())
    assert "ONE QUESTION: Entries that need the atria to contract" in text
    assert "Cardiac rhythm: Atrial fibrillation [ECG, 20 minutes before, Observation/7]" in flat
    assert "Look again: Fourth heart sound: listen again" in flat
    assert "Source: McGee" in flat
    assert "both true" in text
    for safety in SAFETY_TEXTS:
        assert safety in flat
    assert max(map(len, text.splitlines())) <= WIDTH


def test_the_sheet_of_nothing_reassures_nobody() -> None:
    text = text_of((S4,), (replace(AF, answers=("sinus-rhythm",)),))
    assert "Nothing to raise. That is no reassurance" in text
    assert "has what it needs: Cardiac rhythm: Sinus rhythm" in text


def test_only_the_unrecorded_data_that_matter_are_named_and_the_rest_is_counted() -> None:
    text = text_of((S4, Entry("murmur.systolic")), ())
    named = [line for line in text.splitlines() if "not recorded, would matter" in line]
    assert any("Cardiac rhythm" in line for line in named)
    assert max(line.count(";") for line in named) < MAX_UNKNOWN
    assert re.search(r"Unrecorded things of less weight: \d+; the JSON form lists them all", text)


@pytest.mark.parametrize(
    "fact",
    [
        Fact("patient.age", State.PRESENT, Source.DEMOGRAPHICS, measure=Measure(Decimal(6), "a")),
        Fact(
            "patient.pregnancy-status", State.PRESENT, Source.DEMOGRAPHICS, ("pregnant",), time="2026-11-29"
        ),
    ],
)
def test_a_patient_the_rules_are_not_meant_for_is_told_so(fact: Fact) -> None:
    text = text_of((S4,), (fact,))
    assert "MOST RULES ARE NOT MEANT FOR THIS PATIENT AND WERE NOT APPLIED" in text
    assert words.label(fact.id) in text
    assert "NOT MEANT" not in text_of((S4,), ())


def test_a_lesion_that_the_examiner_suspects_is_not_told_as_a_fact() -> None:
    text = text_of(
        (Entry("murmur.systolic", qualifiers=(Qualifier("suspected-lesion", "aortic-stenosis"),)),), ()
    )
    assert "(suspected: Aortic stenosis)" in " ".join(text.split())


def test_what_could_not_be_read_stands_on_the_sheet() -> None:
    exam = Exam(Party("p"), "x", "", Moment("2026-11-30T10:00:00+01:00"), (S4,))
    found = review(exam, Context(NOW, ()))
    decision = decide(found, Memory("p"), encounter="e", now=NOW)
    issues = [
        *(
            Issue("error", "security", "chart-other-patient", "Another patient.", f"entry[{n}]")
            for n in range(3)
        ),
        Issue("information", "informational", "x", "Nothing much."),
    ]
    text = sheet(exam, found, decision, issues)
    assert "LEFT OUT OF THE CHART\n  - Another patient. (3 places)" in text
    assert "Nothing much" not in text


def test_copies_of_one_statement_are_told_once() -> None:
    copies = tuple(replace(AF, reference=f"Observation/{n}") for n in range(500))
    text = text_of((S4,), copies)
    assert re.search(r"Observation/0\] and \d+ more that say the same", " ".join(text.split()))
    assert text.count("Observation/") < 20


def test_disagreeing_sources_are_both_named() -> None:
    text = text_of((S4,), (AF, replace(AF, answers=("sinus-rhythm",), reference="Observation/8")))
    assert "SOURCES THAT DISAGREE (BOTH KEPT, NEITHER USED)" in text
    assert "Observation/7" in text
    assert "Observation/8" in text
    assert "ONE QUESTION" not in text


def test_no_sheet_says_what_must_not_be_said() -> None:
    """Wording of the policy: no fault is laid on anybody, and nothing is ordered."""
    for facts in ((AF,), (replace(AF, answers=("sinus-rhythm",)),), ()):
        text = text_of((S4, Entry("murmur.systolic"), Entry("murmur.diastolic")), facts)
        assert not re.search(r"\b(error|wrong|impossible|mistake|must)\b", text, re.IGNORECASE)


def test_nothing_in_the_sheet_commands_a_terminal() -> None:
    words_ = Qualifier("quality", text="rough\x1b[2J\u202e\nNOW: urgent clinical review")
    text = text_of((Entry("heart-sound.s4", qualifiers=(words_,)),), ())
    assert "rough" in text
    assert all(letter.isprintable() or letter == "\n" for letter in text)
    assert not any(line.startswith("NOW") for line in text.splitlines())


@pytest.mark.parametrize(
    ("seconds", "clock", "said"),
    [
        (None, True, "time not known"),
        (0, True, "at the same time"),
        (59, True, "at the same time"),
        (60, True, "1 minute before"),
        (7200, True, "2 hours before"),
        (-600, True, "10 minutes after"),
        (600, False, "same day"),
        (86_400 * 3, False, "3 days before"),
        (31_557_600 * 2, True, "2 years before"),
    ],
)
def test_ages(seconds: int | None, clock: bool, said: str) -> None:
    assert words.age(seconds, clock=clock) == said


def test_what_entries_say() -> None:
    exam = Exam(
        Party("p"), "x", "", Moment("2026-11-30T10:00:00+01:00"),
        (
            Entry("murmur.systolic", qualifiers=(Qualifier("grade", grade=Grade(2, 3, 6)),)),
            Entry("echo.lvef", measure=Measure(Decimal(60), "%", high=Decimal(65))),
            Entry("echo.e-e-prime-ratio", measure=Measure(Decimal("12.5"), "{ratio}", ">")),
            Entry("rhythm.regularity", answers=("irregularly-irregular",)),
        ),
    )  # fmt: skip
    low = replace(
        AF, id="condition.hypertension", answers=(), source=Source.PROBLEM_LIST, low_trust=True, time="2011"
    )
    table = collect(exam, Context(NOW, (low,)))
    said = {items[0].id: words.entry(items[0]) for items in table.by_id.values()}
    assert said["murmur.systolic"] == "Systolic murmur: present (grade 2-3/6) [this examination]"
    assert said["echo.lvef"] == "Left ventricular ejection fraction: 60 to 65 % [this examination]"
    assert said["echo.e-e-prime-ratio"] == "E to e' ratio: >12.5 [this examination]"
    assert said["rhythm.regularity"].startswith("Regularity of the pulse: Irregularly irregular")
    assert said["condition.hypertension"] == (
        "Systemic hypertension: present [problem list, 15 years before, less trusted, Observation/7]"
    )


def test_the_sheet_to_sign_names_every_rule_that_is_shown() -> None:
    book = load()
    text = signoff_sheet(book)
    shown = [r for r in book.rules.values() if r.tier in (Tier.U, Tier.T1, Tier.T2)]
    assert text.count("\n### ") == len(shown)
    assert text.count("| Signed, date | |") == len(shown)
    for rule in shown:
        assert f"### {rule.id}\n" in text
        part = text.partition(f"### {rule.id}\n")[2].partition("\n### ")[0]
        for cell in (rule.mechanism, rule.source):
            assert cell.replace("|", "\\|") in part, rule.id
        assert "| How it was seen |" in part
        if rule.tier is Tier.U:
            assert "| Shown | urgent clinical review |" in part
    for rule in book.rules.values():
        if rule not in shown:
            assert f"### {rule.id}\n" not in text
    for safety in SAFETY_TEXTS:
        assert safety in text


def test_the_sheet_to_sign_says_exactly_what_is_judged() -> None:
    book = load()
    text = rule_text(book.rules["s4.in-mitral-stenosis"], book)
    assert (
        "| Finding | Fourth heart sound: present, with side of the heart: Left-sided (left ventricle)" in text
    )
    assert "| Does not go with | the first of these that is known (Mitral valve area: at most 1.5 cm²" in text
    assert "of the last 1 year (older weighs less)" in text
    text = rule_text(book.rules["murmur.thrill-and-low-grade"], book)
    assert "| Needs | Systolic murmur: present, with grade at least 4 of 6, of the same site" in text
    assert "| Holds also in | child, pregnancy |" in text
    text = rule_text(book.rules["urgent.low-pressure-and-cold-or-wet"], book)
    assert "| Finding | Systolic blood pressure: below 90 mmHg, from this examination |" in text
    assert "| Silent where | any of (Mechanical circulatory support" in text


def test_every_condition_of_every_rule_has_words() -> None:
    for rule in load().rules.values():
        for condition in (rule.subject, rule.when, rule.unless, rule.other):
            if condition is not None:
                assert in_words(condition).count("(") == in_words(condition).count(")"), rule.id


def test_a_rule_that_the_site_silenced_is_not_to_be_signed(
    made_up: Any, one_rule: Callable[..., str]
) -> None:
    book = made_up(
        one_rule("a.one", "heart-sound.s4", "{fact: thrill}"), one_rule("a.two", "thrill", "{fact: murmur}")
    )
    assert "### a.one" in signoff_sheet(replace(book, silenced=frozenset({"a.two"})))
    assert "### a.two" not in signoff_sheet(replace(book, silenced=frozenset({"a.two"})))


def test_a_cell_keeps_the_table_whole(made_up: Any, one_rule: Callable[..., str]) -> None:
    text = one_rule("a.one", "heart-sound.s4", "{fact: thrill}").replace("A source", "One | two")
    book = made_up(text)
    assert "| Source | One \\| two |" in rule_text(book.rules["a.one"], book)
