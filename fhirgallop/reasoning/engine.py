"""The engine: guards first, then every rule whose finding was recorded, each with its grounds."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from typing import Final

from fhirgallop.reasoning.atoms import NAMES
from fhirgallop.reasoning.conclusion import CONFLICTING, FIRED, Conclusion, Outcome
from fhirgallop.reasoning.conditions import Support, View, joined, smallest, steps
from fhirgallop.reasoning.items import Ground, ItemTable
from fhirgallop.reasoning.logic import Truth
from fhirgallop.reasoning.measured import GRADE_OF_SUBJECT
from fhirgallop.reasoning.program import Saying
from fhirgallop.reasoning.rule import Rule
from fhirgallop.reasoning.rulebook import Rulebook
from fhirgallop.reasoning.vocabulary import CEILING, Relation, Tier

_NO_SUPPORT: Final[tuple[Support, ...]] = (frozenset(),)
_SETTLED: Final = FIRED | {Outcome.MET, Outcome.CONFIRMED}


@dataclass(frozen=True, slots=True)
class Concluded:
    """Everything the rules gave, the guards in force, and the view it was judged on."""

    conclusions: tuple[Conclusion, ...]
    guards: tuple[Conclusion, ...]
    view: View


def conclude(book: Rulebook, table: ItemTable) -> Concluded:
    """Judge all rules of the recorded findings, in a fixed order whatever the order of the entries."""
    view = View(table)
    guards = tuple(_grounded(book.guards.decide(view), view))
    found = [_guarded(conclusion, guards) for conclusion in _grounded(book.program.decide(view), view)]
    found = _merged(found)
    return Concluded((*found, *_notes(guards, found)), guards, view)


def _grounded(sayings: list[Saying], view: View) -> Iterator[Conclusion]:
    for saying in sayings:
        conclusion = grounded(saying, view)
        if conclusion is not None:
            yield conclusion


def grounded(saying: Saying, view: View) -> Conclusion | None:
    """What a rule says, judged again with its grounds; None when its very subject keeps it silent."""
    rule = saying.rule
    about = view.about(min(saying.subject, key=lambda g: g.item.key).item if saying.subject else None)
    when = rule.when.judge(about) if rule.when is not None else Truth.TRUE
    if when is Truth.FALSE or (rule.unless is not None and rule.unless.judge(about) is Truth.TRUE):
        return None
    other = rule.other.judge(about) if rule.other is not None else Truth.TRUE
    outcome = outcome_of(rule, saying.subject_truth, when, other)
    if outcome in _SETTLED:
        return _founded(rule, outcome, saying, other, about)
    if outcome is None:
        return None
    subject = tuple(sorted(saying.subject, key=_ground_key))
    unknown = _unknowns(rule, saying.subject_truth, when, other, about)
    hinges = tuple(rule.other.unknowns(about)) if rule.other and other is Truth.UNKNOWN else ()
    for asked in (unknown, hinges):
        if asked and not any(map(_worth_asking, asked)):
            return None
    unknown = tuple(filter(_worth_asking, unknown))
    return Conclusion(rule, outcome, rule.strength, Tier.T0, subject, unknown=unknown)


def outcome_of(rule: Rule, subject: Truth, when: Truth, other: Truth) -> Outcome | None:
    """How a rule comes out; None when it has nothing to say. Unknown never fires."""
    applies = subject is Truth.TRUE and when is Truth.TRUE
    match rule.relation:
        case Relation.REQUIRES:
            if other is Truth.TRUE:
                return Outcome.MET if applies else None
            return Outcome.UNMET if applies and other is Truth.FALSE else Outcome.OPEN
        case Relation.CONTRADICTS | Relation.CHECK:
            if other is Truth.FALSE:
                return None
            return Outcome.CONFLICT if applies and other is Truth.TRUE else Outcome.OPEN
        case Relation.EXPECTS:
            if other is Truth.UNKNOWN:
                return Outcome.NOT_LOOKED_FOR
            if not applies:
                return Outcome.OPEN if other is Truth.FALSE else None
            return Outcome.CONFIRMED if other is Truth.TRUE else Outcome.MISSING
    if applies and other is Truth.TRUE:
        return Outcome.NOTE if rule.relation is Relation.GUARD else Outcome.EXPLAINS
    return Outcome.OPEN if rule.tier is Tier.U and other is not Truth.FALSE else None


def _founded(rule: Rule, outcome: Outcome, saying: Saying, other: Truth, view: View) -> Conclusion:
    subject = tuple(frozenset((ground,)) for ground in saying.subject)
    parts = []
    if rule.when is not None:
        parts.append(rule.when.supports(view, Truth.TRUE))
    if rule.other is not None:
        parts.append(rule.other.supports(view, other))
    rest = joined(parts) if parts else _NO_SUPPORT
    whole = smallest(a | b for a in subject for b in rest)
    lost = steps(whole[0]) if whole else 0
    strength, tier = rule.strength.weakened(lost), rule.tier
    if lost:
        if tier is Tier.U:
            # An urgent combination needs every part present and timed within the encounter.
            doubtful = dict.fromkeys(g.item.id for g in _ordered(whole[:1]) if g.steps)
            return Conclusion(
                rule, Outcome.OPEN, rule.strength, Tier.T0, _ordered(subject), unknown=tuple(doubtful)
            )
        tier = tier.at_most(CEILING[strength])
        if any(ground.stale for ground in whole[0]):
            tier = tier.at_most(Tier.T2)
    if outcome not in FIRED:
        tier = Tier.T0
    sets: tuple[frozenset[str], ...] = ()
    if outcome in CONFLICTING:
        sets = tuple(frozenset(g.item.key for g in support) for support in whole if steps(support) == lost)
    return Conclusion(rule, outcome, strength, tier, _ordered(subject), _ordered(rest), sets)


def _unknowns(rule: Rule, subject: Truth, when: Truth, other: Truth, view: View) -> tuple[str, ...]:
    found: dict[str, None] = {}
    if subject is Truth.UNKNOWN and view.subject is not None:
        for having in rule.subject.having:
            if having.holds(view.subject) is Truth.UNKNOWN:
                found[f"{rule.finding}#{having.axis}"] = None
    if rule.when is not None and when is Truth.UNKNOWN:
        found.update(dict.fromkeys(rule.when.unknowns(view)))
    if rule.other is not None and other is Truth.UNKNOWN:
        found.update(dict.fromkeys(rule.other.unknowns(view)))
    return tuple(found)


def _worth_asking(datum: str) -> bool:
    """Not a name nobody gave, nor the loudness of a murmur nobody graded: there is nothing to look for."""
    return datum.partition("#")[2] not in NAMES and datum not in GRADE_OF_SUBJECT


def _ordered(supports: tuple[Support, ...]) -> tuple[Ground, ...]:
    grounds = {ground for support in supports for ground in support}
    return tuple(sorted(grounds, key=_ground_key))


def _ground_key(ground: Ground) -> tuple[str, int]:
    return ground.item.key, ground.steps


def _guarded(conclusion: Conclusion, guards: tuple[Conclusion, ...]) -> Conclusion:
    rule, tier = conclusion.rule, conclusion.tier
    silenced = []
    for guard in guards:
        if guard.rule.suppresses is not None and guard.rule.suppresses.covers(rule):
            silenced.append(guard.rule.id)
        if guard.rule.caps is not None and tier is not Tier.U and guard.rule.caps.covers(rule):
            tier = tier.at_most(guard.rule.cap)
    if silenced or tier is not conclusion.tier:
        return replace(conclusion, tier=tier, silenced_by=tuple(dict.fromkeys(silenced)))
    return conclusion


def _merged(found: list[Conclusion]) -> list[Conclusion]:
    speaking = {c.rule.id for c in found if c.fired}
    result = []
    for conclusion in found:
        louder = next((name for name in conclusion.rule.yields_to if name in speaking), "")
        if louder and conclusion.outcome in FIRED:
            result.append(replace(conclusion, tier=Tier.T0, merged_into=louder))
        else:
            result.append(conclusion)
    return result


def _notes(guards: tuple[Conclusion, ...], found: list[Conclusion]) -> Iterator[Conclusion]:
    """The guards that have something to say; some speak only beside a conflict about the same finding."""
    disputed = {c.rule.finding for c in found if c.fired and c.outcome in CONFLICTING}
    for guard in guards:
        rule = guard.rule
        if rule.wording and (not rule.only_with_conflict or rule.finding in disputed):
            yield _guarded(guard, tuple(g for g in guards if g is not guard))
