"""Properties of the reasoning that hold for any examination and any chart."""

from __future__ import annotations

from dataclasses import replace
from datetime import datetime, timedelta
from decimal import Decimal
from itertools import chain, combinations

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from fhirgallop.exam.context import Context, Fact, Source, State
from fhirgallop.exam.entry import Entry, Measure, Qualifier
from fhirgallop.exam.exam import Exam, Party
from fhirgallop.exam.moment import Moment
from fhirgallop.exam.presence import Presence
from fhirgallop.reasoning.conclusion import CONFLICTING
from fhirgallop.reasoning.conditions import View
from fhirgallop.reasoning.conflicts import HittingSet, minimal
from fhirgallop.reasoning.engine import conclude, grounded
from fhirgallop.reasoning.items import collect
from fhirgallop.reasoning.program import Saying, subjects_of
from fhirgallop.reasoning.review import Review, review
from fhirgallop.reasoning.rulebook import load
from fhirgallop.reasoning.vocabulary import Relation, Strength, Tier, kinds

EXAM_TIME = datetime.fromisoformat("2026-11-30T10:00:00+01:00")
PATIENT = Party("p-1", "https://clinic.example/patients")
UNKNOWN = (Presence.UNCERTAIN, Presence.NOT_EXAMINED, Presence.NOT_EXAMINABLE)
CHART_SOURCES = (Source.ECG, Source.ECHO, Source.CATHETER, Source.PROBLEM_LIST, Source.EARLIER_EXAM)

# Every id that a shipped rule looks at, so that rules of every family are met.
USED = sorted({atom.fact for rule in load().rules.values() for atom in rule.atoms() if getattr(atom, "fact", "")})
USED_SIGNS = [id_ for id_ in USED if kinds()[id_].kind == "sign"]


def _qualifiers(id_: str) -> st.SearchStrategy[tuple[Qualifier, ...]]:
    axes = sorted(kinds()[id_].qualifiers & {"chamber", "severity", "valve", "pacing-mode"})
    values = {"chamber": ["left", "right"], "severity": ["mild", "moderate", "severe"],
              "valve": ["mitral", "aortic"], "pacing-mode": ["vvi", "ddd"]}  # fmt: skip
    if not axes:
        return st.just(())
    return st.sampled_from(axes).flatmap(
        lambda axis: st.one_of(st.just(()), st.sampled_from(values[axis]).map(lambda v: (Qualifier(axis, v),)))
    )


def _numbers(id_: str) -> st.SearchStrategy[Measure]:
    kind = kinds()[id_]
    low, high = int(kind.low or 0), int(kind.high or 100)
    return st.integers(low, max(low, high)).map(lambda n: Measure(Decimal(n), kind.unit))


@st.composite
def entries(draw: st.DrawFn) -> tuple[Entry, ...]:
    ids = draw(st.lists(st.sampled_from(["heart-sound.s4", "rhythm.diagnosis", *USED]), unique=True, max_size=9))
    found = []
    for id_ in ids:
        kind = kinds()[id_]
        qualifiers = draw(_qualifiers(id_))
        if kind.kind == "sign":
            presence = draw(st.sampled_from([Presence.PRESENT, Presence.PRESENT, Presence.ABSENT, *UNKNOWN]))
            found.append(Entry(id_, presence, qualifiers=qualifiers if presence is Presence.PRESENT else ()))
        elif kind.kind == "choice":
            found.append(Entry(id_, answers=(draw(st.sampled_from(sorted(kind.answers))),), qualifiers=qualifiers))
        elif kind.kind == "quantity":
            found.append(Entry(id_, measure=draw(_numbers(id_))))
    return tuple(found)


@st.composite
def facts(draw: st.DrawFn, *, known_only: bool = False) -> tuple[Fact, ...]:
    found = []
    for number, id_ in enumerate(draw(st.lists(st.sampled_from(USED), max_size=8))):
        kind = kinds()[id_]
        hours = draw(st.sampled_from([0, 1, 5, 23, 30, 24 * 10, 24 * 40, 24 * 500, 24 * 3000]))
        states = [State.PRESENT, State.ABSENT] if known_only else list(State)
        found.append(
            Fact(
                id_,
                draw(st.sampled_from(states)) if kind.kind == "sign" else State.PRESENT,
                draw(st.sampled_from(CHART_SOURCES)),
                answers=(draw(st.sampled_from(sorted(kind.answers))),) if kind.kind == "choice" else (),
                measure=draw(_numbers(id_)) if kind.kind == "quantity" else None,
                qualifiers=draw(_qualifiers(id_)),
                time=_ago(hours) if draw(st.booleans()) or known_only else "",
                reference=f"f/{number}",
                low_trust=draw(st.booleans()),
            )
        )
    return tuple(found)


def _ago(hours: int) -> str:
    return (EXAM_TIME - timedelta(hours=hours)).isoformat()


def _review(said: tuple[Entry, ...], known: tuple[Fact, ...]) -> Review:
    exam = Exam(PATIENT, "x", "https://clinic.example/exams", Moment(EXAM_TIME.isoformat()), said)
    return review(exam, Context(EXAM_TIME + timedelta(minutes=5), known, PATIENT))


def _cards(found: Review) -> set[tuple[str, Tier]]:
    return {(c.rule.id, c.tier) for c in found.raised}


@given(entries(), facts(), st.sampled_from(USED_SIGNS), st.sampled_from(UNKNOWN))
def test_adding_an_unknown_never_raises_a_card(
    said: tuple[Entry, ...], known: tuple[Fact, ...], id_: str, presence: Presence
) -> None:
    said = tuple(entry for entry in said if entry.finding != id_)
    before, after = _review(said, known), _review((*said, Entry(id_, presence)), known)
    assert _cards(after) == _cards(before)
    unsure = Fact(id_, State.UNCERTAIN, Source.PROBLEM_LIST, time=_ago(1))
    for state in (State.UNCERTAIN, State.REFUTED):
        assert _cards(_review(said, (*known, replace(unsure, state=state)))) == _cards(before)


@given(entries(), facts())
def test_removing_a_finding_never_adds_a_contradiction_about_it(
    said: tuple[Entry, ...], known: tuple[Fact, ...]
) -> None:
    before = {(c.rule.id, c.subject[0].item.key) for c in _review(said, known).contradictions}
    for gone in said:
        rest = tuple(entry for entry in said if entry is not gone)
        for conclusion in _review(rest, known).contradictions:
            grounds = (*conclusion.subject, *conclusion.grounds)
            if any(g.item.id == gone.finding for g in grounds):
                # Only the chart can still say it, and it said it before.
                assert all(not g.item.of_exam for g in grounds if g.item.id == gone.finding)
                assert (conclusion.rule.id, conclusion.subject[0].item.key) in before or any(
                    fact.id == gone.finding for fact in known
                )


@given(entries(), facts(), st.randoms(use_true_random=False))
def test_order_does_not_matter(said: tuple[Entry, ...], known: tuple[Fact, ...], random: object) -> None:
    shuffled, facts_shuffled = list(said), list(known)
    random.shuffle(shuffled)  # type: ignore[attr-defined]
    random.shuffle(facts_shuffled)  # type: ignore[attr-defined]
    assert _review(said, known).as_dict() == _review(tuple(shuffled), tuple(facts_shuffled)).as_dict()


@given(entries(), facts(known_only=True), st.sampled_from([1, 12, 48, 24 * 40, 24 * 800]))
def test_an_older_datum_never_bears_more(said: tuple[Entry, ...], known: tuple[Fact, ...], more: int) -> None:
    order, tiers = list(Strength), list(Tier)
    fresh = {c.rule.id: c for c in _review(said, known).contradictions}
    for index, fact in enumerate(known):
        older = (datetime.fromisoformat(fact.time) - timedelta(hours=more)).isoformat()
        aged = replace(fact, time=older)
        for conclusion in _review(said, (*known[:index], aged, *known[index + 1 :])).contradictions:
            if all(g.item.place != fact.reference for g in (*conclusion.subject, *conclusion.grounds)):
                continue
            others = [f for i, f in enumerate(known) if i != index and f.id == fact.id]
            if others or any(entry.finding == fact.id for entry in said):
                continue  # an older value may now agree with nobody, and a newer one speaks in its place
            before = fresh.get(conclusion.rule.id)
            assert before is not None, conclusion.rule.id
            assert order.index(conclusion.strength) >= order.index(before.strength)
            assert tiers.index(conclusion.tier) >= tiers.index(before.tier)


@given(entries(), facts())
def test_conflict_sets_are_minimal_and_the_recheck_touches_all(
    said: tuple[Entry, ...], known: tuple[Fact, ...]
) -> None:
    found = _review(said, known)
    sets = [frozenset(item.key for item in conflict.items) for conflict in found.conflicts]
    assert all(sets)
    for one, other in combinations(sets, 2):
        assert not one <= other
        assert not other <= one
    looked = {look.item.key for look in found.repair.looks}
    assert all(looked & conflict for conflict in sets)
    for key in looked:
        assert any(not (looked - {key}) & conflict for conflict in sets), "every look is needed"
    loud = [c for c in found.contradictions if c.strength in (Strength.HARD, Strength.STRONG)]
    assert bool(loud) == bool(sets)


_KEYS = [f"k{n}" for n in range(7)]
_SYSTEMS = st.lists(st.frozensets(st.sampled_from(_KEYS), min_size=1, max_size=4), min_size=1, max_size=8)


@given(_SYSTEMS, st.fixed_dictionaries({key: st.integers(1, 9) for key in _KEYS}))
def test_the_recheck_is_the_cheapest_by_brute_force(
    groups: list[frozenset[str]], cost: dict[str, int]
) -> None:
    ties = {key: (-sum(key in g for g in groups), 0.0, 5, key) for key in _KEYS}
    search = HittingSet(groups, cost, ties)
    best = search.best()
    assert search.exact
    hitting = [
        chosen
        for chosen in chain.from_iterable(combinations(_KEYS, size) for size in range(len(_KEYS) + 1))
        if all(group & set(chosen) for group in groups)
    ]
    cheapest = min(sum(cost[key] for key in chosen) for chosen in hitting)
    assert sum(cost[key] for key in best) == cheapest
    equal = [chosen for chosen in hitting if sum(cost[key] for key in chosen) == cheapest]
    assert set(best) == set(min(equal, key=lambda chosen: sorted(ties[key] for key in chosen)))


@given(_SYSTEMS)
def test_minimal_sets_by_brute_force(groups: list[frozenset[str]]) -> None:
    expected = {g for g in groups if not any(other < g for other in groups)}
    assert set(minimal(groups)) == expected


@given(entries(), facts())
def test_the_compiled_rules_agree_with_judging_each_rule(
    said: tuple[Entry, ...], known: tuple[Fact, ...]
) -> None:
    exam = Exam(PATIENT, "x", "https://clinic.example/exams", Moment(EXAM_TIME.isoformat()), said)
    table = collect(exam, Context(EXAM_TIME + timedelta(minutes=5), known, PATIENT))
    book = load()
    quick = {
        (c.rule.id, c.outcome, c.subject[0].item.key if c.subject else "")
        for c in conclude(book, table).conclusions
        if c.rule.relation is not Relation.GUARD
    }
    view = View(table)
    slow = set()
    for rule in book.rules.values():
        if rule.relation is not Relation.GUARD and rule.finding in table.by_id:
            for truth, grounds in subjects_of(rule.subject, view):
                found = grounded(Saying(rule, truth, grounds, None), view)  # type: ignore[arg-type]
                if found is not None:
                    slow.add((rule.id, found.outcome, found.subject[0].item.key if found.subject else ""))
    assert quick == slow


@given(entries(), facts())
@settings(max_examples=50)
def test_another_patients_chart_is_refused(said: tuple[Entry, ...], known: tuple[Fact, ...]) -> None:
    exam = Exam(PATIENT, "x", "https://clinic.example/exams", Moment(EXAM_TIME.isoformat()), said)
    other = Context(EXAM_TIME, known, Party("p-2", PATIENT.system))
    with pytest.raises(ValueError, match="another patient"):
        review(exam, other)


@given(entries(), facts())
def test_only_the_fixed_phrase_is_urgent(said: tuple[Entry, ...], known: tuple[Fact, ...]) -> None:
    for conclusion in _review(said, known).urgent:
        shown = conclusion.as_dict()
        assert shown["text"] == "urgent clinical review"
        assert shown["subject"]
        assert not {"mechanism", "source"} & shown.keys()
        assert conclusion.outcome not in CONFLICTING
