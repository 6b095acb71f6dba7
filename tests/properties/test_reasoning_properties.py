"""Properties of the reasoning that hold for any examination and any chart."""

from __future__ import annotations

from dataclasses import replace
from datetime import datetime, timedelta
from decimal import Decimal
from itertools import chain, combinations
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from fhirgallop.exam import catalogue
from fhirgallop.exam.context import Context, Fact, Source, State
from fhirgallop.exam.entry import Entry, Measure, Qualifier
from fhirgallop.exam.exam import Exam, Party
from fhirgallop.exam.moment import Moment
from fhirgallop.exam.presence import Presence
from fhirgallop.reasoning.atoms import Atom
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
CHART_SOURCES = (Source.ECG, Source.ECHO, Source.CATHETER, Source.PROBLEM_LIST)
CATALOGUED = catalogue.load().findings

Patient = tuple[tuple[Entry, ...], tuple[Fact, ...]]
RULES = list(load().rules.values())
ATOMS = [[atom for atom in rule.atoms() if isinstance(atom, Atom)] for rule in RULES]


@st.composite
def saying(draw: st.DrawFn, atom: Atom) -> dict[str, Any]:
    """Something recorded under the id of an atom, mostly such that the atom holds."""
    kind = kinds()[atom.fact]
    qualifiers = [
        Qualifier(having.axis, draw(st.sampled_from(sorted(having.values))))
        for having in atom.having
        if having.values and draw(st.integers(0, 5))
    ]
    found: dict[str, Any] = {
        "qualifiers": tuple(qualifiers),
        "answers": (),
        "measure": None,
        "state": State.PRESENT,
    }
    if kind.kind == "sign":
        wanted = State.ABSENT if atom.want == "absent" else State.PRESENT
        found["state"] = draw(
            st.sampled_from([wanted, wanted, wanted, State.PRESENT, State.ABSENT, State.UNCERTAIN])
        )
    elif kind.kind == "choice":
        likely = sorted(atom.answers) * 3 or sorted(kind.answers)
        found["answers"] = (
            draw(st.sampled_from([*likely, *sorted(atom.against or ()), *sorted(kind.answers)])),
        )
    elif kind.kind == "quantity":
        centre = atom.bounds[0].cutoff.value if atom.bounds else (kind.low or Decimal(1))
        factor = draw(st.sampled_from(["0.5", "0.9", "1", "1.1", "2"]))
        found["measure"] = Measure(centre * Decimal(factor), kind.unit)
    return found


CONFLICTABLE = [
    n
    for n, rule in enumerate(RULES)
    if rule.relation in (Relation.REQUIRES, Relation.CONTRADICTS, Relation.CHECK)
]


def _atoms(draw: st.DrawFn) -> list[Atom]:
    """All atoms of a rule that can conflict, and some of others."""
    first = draw(st.sampled_from(CONFLICTABLE))
    others = draw(st.lists(st.sampled_from(range(len(RULES))), max_size=2, unique=True))
    pool = [atom for index in others for atom in ATOMS[index]]
    strays = draw(st.lists(st.sampled_from(pool), max_size=5)) if pool else []
    chosen: dict[str, Atom] = {}
    for atom in (*ATOMS[first], *strays):
        # Earlier and present-day facts of one id stay apart.
        chosen.setdefault(f"{atom.fact} {sorted(atom.sources)}", atom)
    return list(chosen.values())


def _belongs_to_exam(id_: str) -> bool:
    return not id_.startswith(
        ("condition.", "procedure.", "echo.", "catheter.", "lab.", "lesion.", "device.")
    )


@st.composite
def patients(draw: st.DrawFn, *, known_only: bool = False) -> tuple[tuple[Entry, ...], tuple[Fact, ...]]:
    """An examination and a chart that meet a few rules, with strays."""
    entries: dict[str, Entry] = {}
    facts: list[Fact] = []
    atoms = _atoms(draw)
    if draw(st.integers(0, 2)) == 0:
        # A second opinion on the same data.
        atoms += atoms[: draw(st.integers(1, 3))]
    for number, atom in enumerate(atoms):
        said = draw(saying(atom))
        earlier = Source.EARLIER_EXAM in atom.sources
        if (
            atom.fact in CATALOGUED
            and _belongs_to_exam(atom.fact)
            and not earlier
            and draw(st.integers(0, 3))
        ):
            entries[atom.fact] = _entry(atom.fact, said)
            continue
        if known_only and said["state"] is State.UNCERTAIN:
            continue
        source = Source.EARLIER_EXAM if earlier else draw(st.sampled_from(CHART_SOURCES))
        hours = draw(st.sampled_from([0, 1, 5, 23, 30, 24 * 10, 24 * 40, 24 * 500]))
        time = _ago(hours) if known_only or draw(st.integers(0, 4)) else ""
        facts.append(
            Fact(atom.fact, said["state"], source, said["answers"], said["measure"], said["qualifiers"], time,
                 reference=f"f/{number}", low_trust=not draw(st.integers(0, 5)))
        )  # fmt: skip
    return tuple(entries.values()), tuple(facts)


def _entry(id_: str, said: dict[str, Any]) -> Entry:
    presence = {State.PRESENT: Presence.PRESENT, State.ABSENT: Presence.ABSENT}.get(
        said["state"], Presence.UNCERTAIN
    )
    qualifiers = said["qualifiers"] if presence is Presence.PRESENT else ()
    return Entry(id_, presence, said["answers"], said["measure"], qualifiers=qualifiers)


def _ago(hours: int) -> str:
    return (EXAM_TIME - timedelta(hours=hours)).isoformat()


def _review(said: tuple[Entry, ...], known: tuple[Fact, ...]) -> Review:
    exam = Exam(PATIENT, "x", "https://clinic.example/exams", Moment(EXAM_TIME.isoformat()), said)
    return review(exam, Context(EXAM_TIME + timedelta(minutes=5), known, PATIENT))


def _everything(found: Review) -> set[tuple[str, Tier]]:
    """Cards and panel, but for remarks that merely ask what is not known."""
    return {(c.rule.id, c.tier) for c in (*found.raised, *found.panel)}


@given(patients(), st.data())
def test_adding_an_unknown_never_raises_a_card(patient: Patient, data: st.DataObject) -> None:
    said, known = patient
    recorded = {entry.finding for entry in said} | {fact.id for fact in known}
    about = sorted({atom.fact for atoms in ATOMS if atoms[0].fact in recorded for atom in atoms} - recorded)
    if not about:
        return
    id_ = data.draw(st.sampled_from(about))
    before = _everything(_review(said, known))
    if id_ in CATALOGUED:
        for presence in UNKNOWN:
            assert _everything(_review((*said, Entry(id_, presence)), known)) <= before
    for state in (State.UNCERTAIN, State.REFUTED):
        unsure = Fact(id_, state, Source.PROBLEM_LIST, time=_ago(0))
        assert _everything(_review(said, (*known, unsure))) <= before


@given(patients())
def test_removing_a_finding_never_adds_a_contradiction_about_it(patient: Patient) -> None:
    said, known = patient
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


@given(patients(), st.randoms(use_true_random=False))
def test_order_does_not_matter(patient: Patient, random: object) -> None:
    said, known = patient
    shuffled, facts_shuffled = list(said), list(known)
    random.shuffle(shuffled)  # type: ignore[attr-defined]
    random.shuffle(facts_shuffled)  # type: ignore[attr-defined]
    assert _review(said, known).as_dict() == _review(tuple(shuffled), tuple(facts_shuffled)).as_dict()


@given(patients(known_only=True), st.sampled_from([1, 12, 48, 24 * 40, 24 * 800]))
def test_an_older_datum_never_bears_more(patient: Patient, more: int) -> None:
    said, known = patient
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


@given(patients())
def test_conflict_sets_are_minimal_and_the_recheck_touches_all(patient: Patient) -> None:
    said, known = patient
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


@given(patients())
def test_the_compiled_rules_agree_with_judging_each_rule(patient: Patient) -> None:
    said, known = patient
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


@given(patients())
def test_nothing_is_raised_on_what_nobody_recorded(patient: Patient) -> None:
    said, known = patient
    recorded = {entry.finding for entry in said} | {fact.id for fact in known}
    for conclusion in _review(said, known).contradictions:
        assert conclusion.grounds or conclusion.rule.relation is Relation.CHECK
        assert {ground.item.id for ground in (*conclusion.subject, *conclusion.grounds)} <= recorded


@given(patients())
@settings(max_examples=50)
def test_another_patients_chart_is_refused(patient: Patient) -> None:
    said, known = patient
    exam = Exam(PATIENT, "x", "https://clinic.example/exams", Moment(EXAM_TIME.isoformat()), said)
    other = Context(EXAM_TIME, known, Party("p-2", PATIENT.system))
    with pytest.raises(ValueError, match="another patient"):
        review(exam, other)


@given(patients())
def test_only_the_fixed_phrase_is_urgent(patient: Patient) -> None:
    said, known = patient
    for conclusion in _review(said, known).urgent:
        shown = conclusion.as_dict()
        assert shown["text"] == "urgent clinical review"
        assert shown["subject"]
        assert not {"mechanism", "source"} & shown.keys()
        assert conclusion.outcome not in CONFLICTING
