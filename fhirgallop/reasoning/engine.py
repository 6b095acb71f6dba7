"""The engine: guards first, then every rule whose finding was recorded, each with its grounds."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace
from types import MappingProxyType
from typing import Final

from fhirgallop.reasoning.conclusion import CONFLICTING, FIRED, Conclusion, Outcome
from fhirgallop.reasoning.conditions import Support, View, joined, smallest, steps
from fhirgallop.reasoning.items import Ground, ItemTable
from fhirgallop.reasoning.logic import Truth
from fhirgallop.reasoning.rule import Rule
from fhirgallop.reasoning.rulebook import Rulebook
from fhirgallop.reasoning.vocabulary import CEILING, Relation, Tier

_T, _F, _U = Truth.TRUE, Truth.FALSE, Truth.UNKNOWN
_OUTCOMES: Final[Mapping[Relation, Mapping[Truth, Outcome]]] = MappingProxyType(
    {
        Relation.REQUIRES: {_T: Outcome.MET, _F: Outcome.UNMET, _U: Outcome.OPEN},
        Relation.CONTRADICTS: {_T: Outcome.CONFLICT, _U: Outcome.OPEN},
        Relation.CHECK: {_T: Outcome.CONFLICT, _U: Outcome.OPEN},
        Relation.EXPECTS: {_T: Outcome.CONFIRMED, _F: Outcome.MISSING, _U: Outcome.NOT_LOOKED_FOR},
        Relation.SUGGESTS: {_T: Outcome.EXPLAINS},
        Relation.FOLLOWS: {_T: Outcome.EXPLAINS},
        Relation.GUARD: {_T: Outcome.NOTE},
    }
)
_NO_SUPPORT: Final[tuple[Support, ...]] = (frozenset(),)


@dataclass(frozen=True, slots=True)
class Concluded:
    """Everything the rules gave, and the guards in force."""

    conclusions: tuple[Conclusion, ...]
    guards: tuple[Conclusion, ...]
    view: View


def conclude(book: Rulebook, table: ItemTable) -> Concluded:
    """Judge all rules of the recorded findings, in a fixed order whatever the order of the entries."""
    view = View(table)
    guards = tuple(_judge_all(book.guards, table, view))
    found = [_guarded(conclusion, guards) for conclusion in _judge_all(book.by_finding, table, view)]
    found = list(_merged(found))
    notes = tuple(_notes(guards, found))
    return Concluded((*found, *notes), guards, view)


def _judge_all(index: Mapping[str, tuple[Rule, ...]], table: ItemTable, view: View) -> Iterator[Conclusion]:
    for finding in sorted(table.by_id.keys() & index.keys()):
        for rule in index[finding]:
            yield from judge(rule, view)


def judge(rule: Rule, view: View) -> Iterator[Conclusion]:
    """One rule on every entry it is about."""
    for truth, supports in _subjects(rule, view):
        about = view.about(min(supports[0], key=lambda g: g.item.key).item if supports[0] else None)
        conclusion = _judge_one(rule, truth, supports, about)
        if conclusion is not None:
            yield conclusion


def _subjects(rule: Rule, view: View) -> Iterator[tuple[Truth, tuple[Support, ...]]]:
    of_exam = False
    doubtful: list[Ground] = []
    for ground in rule.subject.grounds(view):
        if not ground.item.of_exam:
            continue
        said = rule.subject.test(ground.item)
        if said is Truth.TRUE:
            of_exam = True
            yield Truth.TRUE, (frozenset((ground,)),)
        elif said is Truth.UNKNOWN:
            doubtful.append(ground)
    if of_exam:
        return
    if rule.subject.judge(view) is Truth.TRUE:
        yield Truth.TRUE, rule.subject.supports(view, Truth.TRUE)
    elif doubtful:
        yield Truth.UNKNOWN, (frozenset(doubtful[:1]),)


def _judge_one(rule: Rule, subject: Truth, supports: tuple[Support, ...], view: View) -> Conclusion | None:
    when = rule.when.judge(view) if rule.when is not None else Truth.TRUE
    if when is Truth.FALSE or (rule.unless is not None and rule.unless.judge(view) is Truth.TRUE):
        return None
    other = rule.other.judge(view) if rule.other is not None else Truth.TRUE
    outcome = _OUTCOMES[rule.relation].get(other)
    if subject is Truth.TRUE and when is Truth.TRUE:
        if outcome in FIRED or outcome in (Outcome.MET, Outcome.CONFIRMED):
            return _founded(rule, outcome, supports, other, view)
    elif outcome not in FIRED and outcome is not Outcome.OPEN:
        return None
    if outcome is None and not (rule.tier is Tier.U and other is Truth.UNKNOWN):
        return None
    if rule.relation in (Relation.GUARD, Relation.SUGGESTS, Relation.FOLLOWS) and rule.tier is not Tier.U:
        return None
    if outcome is not Outcome.NOT_LOOKED_FOR:
        outcome = Outcome.OPEN
    return Conclusion(
        rule, outcome, rule.strength, Tier.T0, _ordered(supports), unknown=_unknowns(rule, subject, view)
    )


def _founded(
    rule: Rule, outcome: Outcome, subject: tuple[Support, ...], other: Truth, view: View
) -> Conclusion | None:
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
            return None
        tier = tier.at_most(CEILING[strength])
        if any(ground.stale for ground in whole[0]):
            tier = tier.at_most(Tier.T2)
    if outcome not in FIRED:
        tier = Tier.T0
    sets: tuple[frozenset[str], ...] = ()
    if outcome in CONFLICTING:
        sets = tuple(frozenset(g.item.key for g in support) for support in whole if steps(support) == lost)
    return Conclusion(rule, outcome, strength, tier, _ordered(subject), _ordered(rest), sets)


def _unknowns(rule: Rule, subject: Truth, view: View) -> tuple[str, ...]:
    found: dict[str, None] = {}
    if subject is Truth.UNKNOWN and view.subject is not None:
        for having in rule.subject.having:
            if having.holds(view.subject) is Truth.UNKNOWN:
                found[f"{rule.finding}#{having.axis}"] = None
    for condition in (rule.when, rule.other):
        if condition is not None and condition.judge(view) is Truth.UNKNOWN:
            found.update(dict.fromkeys(condition.unknowns(view)))
    return tuple(found)


def _ordered(supports: tuple[Support, ...]) -> tuple[Ground, ...]:
    grounds = {ground for support in supports for ground in support}
    return tuple(sorted(grounds, key=lambda g: (g.item.key, g.steps)))


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


def _merged(found: list[Conclusion]) -> Iterator[Conclusion]:
    speaking = {c.rule.id for c in found if c.fired}
    for conclusion in found:
        louder = next((name for name in conclusion.rule.yields_to if name in speaking), "")
        if louder and conclusion.outcome in FIRED:
            yield replace(conclusion, tier=Tier.T0, merged_into=louder)
        else:
            yield conclusion


def _notes(guards: tuple[Conclusion, ...], found: list[Conclusion]) -> Iterator[Conclusion]:
    """The guards that have something to say; some speak only beside a conflict about the same finding."""
    disputed = {c.rule.finding for c in found if c.fired and c.outcome in CONFLICTING}
    for guard in guards:
        rule = guard.rule
        if rule.wording and (not rule.only_with_conflict or rule.finding in disputed):
            yield _guarded(guard, tuple(g for g in guards if g is not guard))
