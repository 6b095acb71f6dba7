"""Laws of the alert policy, whatever is found in whatever order of visits."""

from __future__ import annotations

from collections import Counter
from dataclasses import replace
from typing import Any

from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from fhirgallop.cards.memory import Answer, Memory
from fhirgallop.cards.policy import Policy, answer

SIGNS = [
    "heart-sound.s4", "heart-sound.s3", "thrill", "heart-sound.opening-snap", "heart-sound.ejection-click",
    "heart-sound.venous-hum", "murmur.systolic", "general.pallor", "bruit.carotid", "general.jaundice",
    "lung.crackles", "general.ascites", "oedema.sacral", "general.clubbing", "jvp.kussmaul",
    "general.hepatomegaly", "murmur.diastolic", "symptom.syncope", "symptom.chest-pain",
]  # fmt: skip
_visits = st.lists(
    st.tuples(
        st.sampled_from(["e1", "e2", "e3"]),
        st.lists(st.sampled_from(SIGNS), unique=True, max_size=12),
        st.sampled_from([None, *Answer]),
    ),
    min_size=1,
    max_size=6,
)
_ORDINARY = settings(
    max_examples=120, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture]
)


@given(visits=_visits)
@_ORDINARY
def test_whatever_is_found(visits: list[Any], bedside: Any) -> None:
    patient = replace(bedside, memory=Memory("p"))
    interrupted: Counter[str] = Counter()
    shown: set[tuple[str, str]] = set()
    for encounter, present, given_answer in visits:
        review = patient.review(*present)
        decision = patient.see(*present, encounter=encounter)
        levels = [card.level for card in decision.cards]
        interrupted[encounter] += levels.count("interruptive")
        assert interrupted[encounter] <= 1, "one interruption an encounter"
        if "urgent" in levels:
            assert levels == ["urgent"], "urgent displaces all others"
            assert decision.folded == ()
            assert decision.ask is None
        assert levels.count("advisory") <= 3
        assert levels == sorted(levels, key=["urgent", "interruptive", "advisory"].index), "loudest first"
        fates = Counter(line.rule for line in decision.log)
        assert fates == Counter(c.rule.id for c in review.raised), "each conclusion has exactly one fate"
        families = [s.title for card in (*decision.cards, *decision.folded) for s in card.sections if s.title]
        assert len(families) == len(set(families)), "one card a family"
        for card in decision.cards:
            assert card.entries, "every card names its entries"
            assert (encounter, card.key) not in shown, "the same entries once an encounter"
            shown.add((encounter, card.key))
        if given_answer is not None and decision.cards and given_answer in decision.cards[0].answers:
            patient.memory = answer(
                patient.memory, decision.cards[0], given_answer, encounter=encounter, now=patient.now
            )


@given(present=st.lists(st.sampled_from(SIGNS), unique=True, max_size=12), visits=_visits)
@_ORDINARY
def test_shadow_shows_nothing_and_remembers_nothing(
    present: list[str], visits: list[Any], bedside: Any
) -> None:
    patient = replace(bedside, memory=Memory("p"))
    for encounter, found, _ in visits:
        patient.see(*found, encounter=encounter)
    before = patient.memory
    loud = replace(patient).see(*present, encounter="e9")
    quiet = replace(patient, policy=Policy(shadow=True))
    decision = quiet.see(*present, encounter="e9")
    assert (decision.cards, decision.folded, decision.ask) == ((), (), None)
    assert quiet.memory == before
    assert {line.rule for line in decision.log if line.fate == "shadow"} == {
        line.rule for line in loud.log if line.fate in ("shown", "folded")
    }


@given(
    present=st.lists(st.sampled_from(SIGNS), unique=True, min_size=1, max_size=12), seed=st.integers(0, 99)
)
@_ORDINARY
def test_what_nobody_looked_for_raises_nothing(present: list[str], seed: int, bedside: Any) -> None:
    """A sign left out never brings a conclusion that was not there with it."""
    patient = replace(bedside, memory=Memory("p"))
    fewer = [sign for sign in present if sign != present[seed % len(present)]]
    whole = {line.rule for line in replace(patient).see(*present).log}
    part = {line.rule for line in replace(patient).see(*fewer).log}
    assert part <= whole
