"""The alert policy, point by point: what is shown, how loudly, how often, and what is remembered."""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable
from dataclasses import replace
from datetime import timedelta
from typing import Any

import pytest

from fhirgallop.cards.memory import MAX_ENCOUNTERS, Answer, Memory
from fhirgallop.cards.policy import Decision, answer, decide
from fhirgallop.cards.safety import SAFETY_TEXTS

FIRST = ("heart-sound.s4", "heart-sound.s3")
SECOND = ("heart-sound.opening-snap", "heart-sound.ejection-click")
THIRD = ("heart-sound.opening-snap", "heart-sound.venous-hum")
URGENT = ("murmur.diastolic", "symptom.syncope")
QUIET = (
    "murmur.systolic", "general.pallor", "bruit.carotid", "general.jaundice", "lung.crackles",
    "general.ascites", "oedema.sacral", "general.clubbing", "jvp.kussmaul", "general.hepatomegaly",
)  # fmt: skip


def levels(decision: Decision) -> list[str]:
    return [card.level for card in decision.cards]


def rules(decision: Decision, index: int = 0) -> list[str]:
    return [c.rule.id for c in decision.cards[index].conclusions]


def fates(decision: Decision) -> dict[str, str]:
    return {line.rule: line.fate for line in decision.log}


def test_nothing_to_raise(bedside: Any) -> None:
    decision = bedside.see("heart-sound.s4")
    assert (decision.cards, decision.folded, decision.log) == ((), (), ())
    assert decision.safety == SAFETY_TEXTS


def test_one_interruption_with_its_family_on_one_card(bedside: Any) -> None:
    decision = bedside.see(*FIRST, "thrill")
    assert levels(decision) == ["interruptive"]
    (card,) = decision.cards
    assert [s.title for s in card.sections] == ["First family"]
    assert sorted(rules(decision)) == ["a.loud", "a.quiet"]
    assert {item.id for item in card.entries} == {"heart-sound.s4", "heart-sound.s3", "thrill"}
    assert [look.action for look in card.looks] == ["listen again"]


def test_what_else_would_interrupt_is_collapsed_into_the_one_card(bedside: Any) -> None:
    decision = bedside.see(*FIRST, *SECOND, "heart-sound.venous-hum")
    assert levels(decision) == ["interruptive"]
    titles = [s.title for s in decision.cards[0].sections]
    assert Counter(titles) == Counter(["First family", "Second family", "Third family"])


def test_one_root_cause_is_one_card(bedside: Any) -> None:
    """Second and third family both hang on the opening snap, which accounts for both."""
    decision = bedside.see(*SECOND, "heart-sound.venous-hum")
    (card,) = decision.cards
    assert {s.title for s in card.sections} == {"Second family", "Third family"}
    assert [look.item.id for look in card.looks] == ["heart-sound.opening-snap"]


def test_a_root_cause_joins_the_quiet_to_the_loud(
    made_up: Any, one_rule: Callable[..., str], bedside: Any
) -> None:
    """One entry that disputes with a loud and a quiet family gives one card, the loud family first."""
    book = made_up(
        one_rule("x.quiet", "thrill", "{fact: heart-sound.s4}", family="one", tier="T2", strength="moderate"),
        one_rule("y.loud", "heart-sound.s3", "{fact: heart-sound.s4}", family="two"),
    )
    decision = replace(bedside, book=book).see("heart-sound.s4", "heart-sound.s3", "thrill")
    assert levels(decision) == ["interruptive"]
    assert [s.title for s in decision.cards[0].sections] == ["Second family", "First family"]


def test_the_budget_is_one_interruption_an_encounter(bedside: Any) -> None:
    assert levels(bedside.see(*FIRST)) == ["interruptive"]
    second = bedside.see(*FIRST, *SECOND)
    assert levels(second) == ["advisory"]
    assert rules(second) == ["b.loud"]
    assert levels(bedside.see(*SECOND, encounter="e2")) == ["interruptive"]


def test_a_site_may_forbid_interruptions(bedside_with: Callable[..., Any]) -> None:
    assert levels(bedside_with(interruptions=0).see(*FIRST)) == ["advisory"]


def test_the_same_entries_are_shown_once_an_encounter(bedside: Any) -> None:
    bedside.see(*FIRST)
    again = bedside.see(*FIRST)
    assert again.cards == ()
    assert fates(again) == {"a.loud": "already-shown"}
    assert levels(bedside.see(*FIRST, encounter="e2")) == ["interruptive"]


def test_it_comes_again_when_an_entry_changes(bedside: Any) -> None:
    bedside.see("heart-sound.s4", chart={"heart-sound.s3": "2026-11-30T09:00:00+01:00"})
    assert bedside.see("heart-sound.s4", chart={"heart-sound.s3": "2026-11-30T09:00:00+01:00"}).cards == ()
    later = bedside.see("heart-sound.s4", chart={"heart-sound.s3": "2026-11-30T09:40:00+01:00"})
    assert rules(later) == ["a.loud"]


def test_urgent_shows_the_phrase_and_the_entries_and_displaces_the_rest(bedside: Any) -> None:
    decision = bedside.see(*URGENT, *FIRST, *QUIET)
    (card,) = decision.cards
    assert (card.level, card.title) == ("urgent", "urgent clinical review")
    assert [item.id for item in card.entries] == ["murmur.diastolic", "symptom.syncope"]
    assert decision.ask is None
    assert fates(decision)["a.loud"] == "displaced"
    assert card.answers == (Answer.LOOKED_AGAIN,)
    said = str(card.as_dict())
    assert "mechanism" not in said
    assert "A source" not in said
    assert "u.first" not in said


def test_urgent_is_shown_once_for_the_same_entries_then_the_rest_may_come(bedside: Any) -> None:
    bedside.see(*URGENT, *FIRST)
    again = bedside.see(*URGENT, *FIRST)
    assert levels(again) == ["advisory"], "the one interruption of the encounter is spent"
    assert fates(again)["u.first"] == "already-shown"
    grown = bedside.see(*URGENT, "symptom.chest-pain", *FIRST)
    assert levels(grown) == ["urgent"]
    assert [item.id for item in grown.cards[0].entries] == [
        "murmur.diastolic",
        "symptom.chest-pain",
        "symptom.syncope",
    ]


def test_urgent_comes_also_after_an_interruption(bedside: Any) -> None:
    bedside.see(*FIRST)
    assert levels(bedside.see(*FIRST, *URGENT)) == ["urgent"]


def test_three_advisory_cards_in_view_the_rest_folded(bedside: Any) -> None:
    decision = bedside.see(*QUIET)
    assert levels(decision) == ["advisory"] * 3
    assert len(decision.folded) == 2
    assert Counter(fates(decision).values()) == Counter(shown=3, folded=2)
    assert bedside.see(*QUIET).cards == (), "what was folded could be unfolded"


@pytest.mark.parametrize(
    "given", [Answer.LOOKED_AGAIN, Answer.WILL_CORRECT, Answer.BOTH_TRUE, Answer.TRUE_IN_PATIENT]
)
def test_any_answer_silences_it_for_the_encounter(given: Answer, bedside: Any) -> None:
    card = bedside.see(*FIRST).cards[0]
    bedside.memory = answer(Memory("p"), card, given, encounter="e1", now=bedside.now)
    assert bedside.see(*FIRST).cards == ()


def test_both_true_holds_for_the_encounter_only(bedside: Any) -> None:
    card = bedside.see(*FIRST).cards[0]
    bedside.memory = answer(bedside.memory, card, Answer.BOTH_TRUE, encounter="e1", now=bedside.now)
    assert fates(bedside.see(*FIRST)) == {"a.loud": "answered"}
    assert levels(bedside.see(*FIRST, encounter="e2")) == ["interruptive"]


def test_true_in_this_patient_holds_for_twelve_months(bedside: Any) -> None:
    card = bedside.see(*FIRST).cards[0]
    bedside.memory = answer(bedside.memory, card, Answer.TRUE_IN_PATIENT, encounter="e1", now=bedside.now)
    for days, shown in ((1, False), (364, False), (365, True)):
        later = replace(bedside, now=bedside.now + timedelta(days=days))
        assert bool(later.see(*FIRST, encounter="e2").cards) is shown, days


def test_true_in_this_patient_does_not_reach_other_findings(bedside: Any) -> None:
    card = bedside.see(*FIRST).cards[0]
    bedside.memory = answer(bedside.memory, card, Answer.TRUE_IN_PATIENT, encounter="e1", now=bedside.now)
    other = bedside.see(*FIRST, "thrill", encounter="e2")
    assert rules(other) == ["a.quiet"]


def test_a_matter_of_definition_is_never_true_in_this_patient(bedside: Any) -> None:
    card = bedside.see(*THIRD).cards[0]
    assert Answer.TRUE_IN_PATIENT not in card.answers
    with pytest.raises(ValueError, match="cannot be answered"):
        answer(bedside.memory, card, Answer.TRUE_IN_PATIENT, encounter="e1", now=bedside.now)
    both = bedside.see(*SECOND, "heart-sound.venous-hum", encounter="e2").cards[0]
    bedside.memory = answer(bedside.memory, both, Answer.TRUE_IN_PATIENT, encounter="e2", now=bedside.now)
    assert rules(bedside.see(*SECOND, "heart-sound.venous-hum", encounter="e3")) == ["c.loud"]


def test_an_urgent_card_can_only_be_acknowledged(bedside: Any) -> None:
    card = bedside.see(*URGENT).cards[0]
    for given in (Answer.BOTH_TRUE, Answer.TRUE_IN_PATIENT, Answer.WILL_CORRECT):
        with pytest.raises(ValueError, match="cannot be answered"):
            answer(bedside.memory, card, given, encounter="e1", now=bedside.now)


def test_unknown_never_alerts_and_asks_at_most_once(bedside: Any) -> None:
    first = bedside.see("murmur.diastolic")
    assert first.cards == ()
    assert first.ask is not None
    assert "Not recorded" in first.ask.text
    assert bedside.see("murmur.diastolic").ask is None


def test_a_single_question_that_is_not_urgent_is_not_asked(bedside: Any) -> None:
    assert bedside.review("heart-sound.s4").next_datum is not None
    assert bedside.see("heart-sound.s4").ask is None


def test_what_is_out_of_date_never_interrupts(bedside: Any) -> None:
    review = bedside.review("heart-sound.s4", "heart-sound.s3")
    (conclusion,) = review.contradictions
    stale = replace(conclusion, grounds=tuple(replace(g, stale=True) for g in conclusion.grounds))
    decision = decide(
        replace(review, contradictions=(stale,)),
        Memory("p"),
        encounter="e",
        now=bedside.now,
        rules=bedside.book,
    )
    assert levels(decision) == ["advisory"]


def test_shadow_works_everything_out_and_shows_nothing(bedside_with: Callable[..., Any]) -> None:
    bedside = bedside_with(shadow=True)
    before = bedside.memory
    decision = bedside.see(*FIRST, *QUIET)
    assert (decision.cards, decision.folded, decision.ask) == ((), (), None)
    assert set(fates(decision).values()) == {"shadow"}
    assert "a.loud" in fates(decision)
    assert bedside.memory == before


def test_the_log_names_every_raised_conclusion_once(bedside: Any) -> None:
    for present in (FIRST, (*FIRST, *QUIET), (*URGENT, *FIRST, *QUIET)):
        review = bedside.review(*present)
        decision = bedside.see(*present)
        assert Counter(line.rule for line in decision.log) == Counter(c.rule.id for c in review.raised)


def test_the_order_of_entries_does_not_matter(bedside: Any) -> None:
    present = (*FIRST, *SECOND, *QUIET)
    one = replace(bedside, memory=Memory("p")).see(*present)
    other = replace(bedside, memory=Memory("p")).see(*reversed(present))
    assert one.as_dict() == other.as_dict()
    assert [c.key for c in one.cards] == [c.key for c in other.cards]


def test_an_encounter_is_needed(bedside: Any) -> None:
    with pytest.raises(ValueError, match="encounter"):
        bedside.see(*FIRST, encounter="")


def test_memory_travels_as_json_and_holds_no_findings(bedside: Any) -> None:
    card = bedside.see(*FIRST).cards[0]
    memory = answer(bedside.memory, card, Answer.TRUE_IN_PATIENT, encounter="e1", now=bedside.now)
    written = memory.as_dict()
    assert Memory.from_dict(written) == memory
    assert "heart-sound" not in str(written)


def test_memory_is_bounded(bedside: Any) -> None:
    for number in range(MAX_ENCOUNTERS + 10):
        bedside.see(*FIRST, encounter=f"e{number}")
    assert len(bedside.memory.shown) == MAX_ENCOUNTERS
    assert len(bedside.memory.interrupted) == MAX_ENCOUNTERS
    assert bedside.see(*FIRST, encounter=f"e{MAX_ENCOUNTERS + 9}").cards == ()


def test_what_has_run_out_is_forgotten(bedside: Any) -> None:
    memory = Memory("p").knowing(["a"], bedside.now)
    assert memory.is_true("a", bedside.now + timedelta(days=364))
    later = memory.knowing(["b"], bedside.now + timedelta(days=400))
    assert [digest for digest, _ in later.true] == ["b"]
