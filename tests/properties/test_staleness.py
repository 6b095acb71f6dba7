"""The older a datum, the less it bears: every rule that can conflict, each fact of the chart aged in turn."""

from __future__ import annotations

from datetime import datetime, timedelta
from decimal import Decimal
from itertools import pairwise
from typing import Any, Final

from fhirgallop.exam import catalogue
from fhirgallop.exam.context import Context, Fact, Source, State
from fhirgallop.exam.entry import Entry, Grade, Measure, Qualifier
from fhirgallop.exam.exam import Exam, Party
from fhirgallop.exam.moment import Moment
from fhirgallop.exam.presence import Presence
from fhirgallop.reasoning.atoms import Atom, Having
from fhirgallop.reasoning.review import review
from fhirgallop.reasoning.rule import Rule
from fhirgallop.reasoning.rulebook import load
from fhirgallop.reasoning.vocabulary import Relation, Strength, Tier, kinds

EXAM_TIME = datetime.fromisoformat("2026-11-30T10:00:00+01:00")
PATIENT = Party("p-1", "https://clinic.example/patients")
HOURS = (0, 1, 12, 23, 25, 48, 24 * 20, 24 * 200, 24 * 500, 24 * 1000, 24 * 4000)
ON_THE_CHART = (
    "condition.", "procedure.", "echo.", "catheter.", "lab.", "lesion.", "device.", "ecg.", "rhythm.",
)  # fmt: skip
GONE: Final = (99, 99)


def _qualifier(having: Having) -> Qualifier:
    if having.axis == "grade":
        step = having.low or having.high or 1
        return Qualifier("grade", grade=Grade(step, step, having.of or 6))
    return Qualifier(having.axis, sorted(having.values)[0])


def _said(atom: Atom) -> dict[str, Any]:
    """What makes an atom true."""
    kind = kinds()[atom.fact]
    measure = None
    if kind.kind == "quantity":
        measure = Measure(kind.low or Decimal(1), kind.unit)
        if atom.bounds:
            bound = atom.bounds[0]
            factor = Decimal("1.5") if bound.op in ("above", "at-least") else Decimal("0.5")
            measure = Measure(bound.cutoff.value * factor, kind.unit)
    answers = (sorted(atom.answers or kind.answers)[0],) if kind.kind == "choice" else ()
    absent = atom.want == "absent"
    return {
        "absent": absent,
        "answers": answers,
        "measure": measure,
        "qualifiers": () if absent else tuple(_qualifier(having) for having in atom.having),
    }


def _patient(rule: Rule) -> tuple[tuple[Entry, ...], tuple[Fact, ...]]:
    """An examination and a chart that meet every part of a rule; of alternatives on one datum, the first."""
    conditions = [rule.subject, *(c for c in (rule.when, rule.other) if c is not None)]
    entries: dict[str, Entry] = {}
    facts: dict[str, Fact] = {}
    for atom in (a for condition in conditions for a in condition.atoms() if isinstance(a, Atom)):
        if atom.fact in entries or atom.fact in facts:
            continue
        said = _said(atom)
        if atom.fact in catalogue.load().findings and not atom.fact.startswith(ON_THE_CHART):
            presence = Presence.ABSENT if said["absent"] else Presence.PRESENT
            entries[atom.fact] = Entry(
                atom.fact, presence, said["answers"], said["measure"], qualifiers=said["qualifiers"]
            )
            continue
        source = Source(sorted(atom.sources)[0]) if atom.sources else Source.ECHO
        facts[atom.fact] = Fact(
            atom.fact, State.ABSENT if said["absent"] else State.PRESENT, source, said["answers"],
            said["measure"], said["qualifiers"], EXAM_TIME.isoformat(), reference=atom.fact,
        )  # fmt: skip
    return tuple(entries.values()), tuple(facts.values())


def _bears(rule: Rule, said: tuple[Entry, ...], known: tuple[Fact, ...]) -> tuple[int, int]:
    """How quiet a rule is: strength and tier as places in their order."""
    exam = Exam(PATIENT, "x", "https://clinic.example/exams", Moment(EXAM_TIME.isoformat()), said)
    found = review(exam, Context(EXAM_TIME + timedelta(minutes=5), known, PATIENT))
    for conclusion in (*found.contradictions, *found.silenced):
        if conclusion.rule.id == rule.id:
            # told on the card of a louder rule, it has no tier of its own
            tier = rule.tier if conclusion.merged_into else conclusion.tier
            return list(Strength).index(conclusion.strength), list(Tier).index(tier)
    return GONE


def _aged(known: tuple[Fact, ...], index: int, hours: int) -> tuple[Fact, ...]:
    fact = known[index]
    time = (EXAM_TIME - timedelta(hours=hours)).isoformat()
    aged = Fact(fact.id, fact.state, fact.source, fact.answers, fact.measure, fact.qualifiers, time,
                reference=fact.reference)  # fmt: skip
    return (*known[:index], aged, *known[index + 1 :])


def test_an_older_datum_never_bears_more_whatever_the_rule() -> None:
    weakened, dropped, stale_and_loud = set(), set(), set()
    conflicting = (Relation.REQUIRES, Relation.CONTRADICTS, Relation.CHECK)
    for rule in (r for r in load().rules.values() if r.relation in conflicting):
        said, known = _patient(rule)
        fresh = _bears(rule, said, known)
        if fresh == GONE:
            continue
        for index in range(len(known)):
            run = [_bears(rule, said, _aged(known, index, hours)) for hours in HOURS]
            for younger, older in pairwise(run):
                assert older[0] >= younger[0], (rule.id, known[index].id, run)
                assert older[1] >= younger[1], (rule.id, known[index].id, run)
            if any(fresh < one < GONE for one in run):
                weakened.add(rule.id)
                if any(one[0] > fresh[0] and one[1] == list(Tier).index(Tier.T1) for one in run):
                    stale_and_loud.add(rule.id)
            if GONE in run:
                dropped.add(rule.id)
    assert len(weakened) >= 15
    assert len(dropped) >= 15
    assert not stale_and_loud
