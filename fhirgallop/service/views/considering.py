"""An examination held against the rules and the chart, with what each card rests on, for a page.

What was shown or answered before does not silence anything here: whoever opens the page sees everything, and
beside each card what was answered to it.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from datetime import datetime
from typing import Any, Final

from fhirgallop.cards import words
from fhirgallop.cards.card import Card
from fhirgallop.cards.conditions import in_words
from fhirgallop.cards.memory import Memory
from fhirgallop.cards.opinion import left_out, limits
from fhirgallop.cards.policy import Decision, Policy, decide
from fhirgallop.chart.elements import identifiers
from fhirgallop.chart.gather import gather
from fhirgallop.chart.log import Log
from fhirgallop.chart.read import Chart, read_gathered
from fhirgallop.exam.context import Context
from fhirgallop.reasoning.conclusion import Conclusion, Outcome, cutoffs_of
from fhirgallop.reasoning.conflicts import ConflictSet
from fhirgallop.reasoning.review import Review, review
from fhirgallop.reasoning.rulebook import Rulebook
from fhirgallop.reasoning.vocabulary import Relation, Tier
from fhirgallop.service.views.examination import Examination

# how a need stands, in words; the order is that of the page
STANDS: Final = {
    Outcome.UNMET: "not met",
    Outcome.CONFLICT: "does not usually go with",
    Outcome.MISSING: "usual companion, not found",
    Outcome.OPEN: "not known",
    Outcome.NOT_LOOKED_FOR: "usual companion, not looked for",
    Outcome.MET: "met",
    Outcome.CONFIRMED: "usual companion, found",
    Outcome.EXPLAINS: "could be explained by",
    Outcome.NOTE: "remark",
}
_LEVELS: Final = {
    "urgent": "Now",
    "interruptive": "One question",
    "advisory": "To consider",
}
_SILENT: Final = frozenset({Outcome.MET, Outcome.CONFIRMED, Outcome.OPEN, Outcome.NOT_LOOKED_FOR})
_LOOKED_FOR: Final = {
    Relation.REQUIRES: "Needs",
    Relation.EXPECTS: "Often comes with",
    Relation.CONTRADICTS: "Does not usually go with",
    Relation.CHECK: "Is asked about when",
}
_SEEN: Final = {
    "excerpt": "abstract or excerpt read",
    "memory": "from memory of published literature",
    "practice": "common practice, no source",
    "definition": "definition",
}


@dataclass(frozen=True, slots=True)
class Basis:
    """One rule's result, with all it rests on.

    Attributes:
        stands: how it came out, in words; `outcome` the same as a code.
        text: what the rule says.
        grounds: entries and facts with value, source and age.
        unknown: what would have to be known.
        cutoffs: those in force, each with its source and the other published ones.
        source, seen, strength, mechanism: where the rule is from and how much it can bear.
    """

    rule: str
    outcome: str
    stands: str
    subject: str
    text: str
    grounds: tuple[str, ...]
    unknown: tuple[str, ...]
    cutoffs: tuple[str, ...]
    source: str
    seen: str
    strength: str
    mechanism: str


@dataclass(frozen=True, slots=True)
class ShownCard:
    """A card as it would be delivered, and behind it what it rests on; an urgent one shows entries alone."""

    card: Card
    level: str
    entries: tuple[str, ...]
    said: tuple[Basis, ...]
    needs: tuple[Basis, ...]
    looks: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Considered:
    """Everything that the page says of one examination.

    Attributes:
        context: what the chart gave; empty where none was handed in.
        cards: in view, loudest first; `folded` the further ones.
        conflicts: sets of entries that cannot all hold, each with the rules that say so.
        looks: what to look at again, cheapest first, so that every such set is touched.
        findings: finding by finding, what each needs and has.
        ask: the one datum that would settle most.
        limits: why most rules are not meant for this patient.
        gaps: what of the chart could not be used.
    """

    context: Context | None
    cards: tuple[ShownCard, ...]
    folded: tuple[ShownCard, ...]
    conflicts: tuple[tuple[tuple[str, ...], tuple[str, ...]], ...]
    looks: tuple[str, ...]
    findings: tuple[tuple[str, tuple[Basis, ...]], ...]
    ask: str
    limits: tuple[str, ...]
    disputed: tuple[str, ...]
    gaps: tuple[str, ...]
    rules_version: str


def consider(
    examination: Examination, chart: Any, now: datetime, *, rules: Rulebook, policy: Policy
) -> Considered:
    """The page's content.

    Args:
        examination: as read back. What a chart holds of it, by the same identifiers, is no second witness.
        chart: the patient's FHIR resources (see chart.read); None where there are none.
        now: the moment, with a zone.
        rules: the rules in force.
        policy: the site's alert policy.
    """
    exam = examination.own.exam
    read = _read(chart, examination, now) if chart is not None else None
    context = read.context if read else Context(now, (), exam.patient)
    found = review(exam, context, rules=rules)
    encounter = exam.encounter.value if exam.encounter else exam.identifier
    decision = decide(
        found, Memory(exam.patient.value), encounter=encounter, now=now, policy=policy, rules=rules
    )
    return Considered(
        read.context if read else None,
        tuple(_shown(card, found) for card in decision.cards),
        tuple(_shown(card, found) for card in decision.folded),
        () if policy.shadow else tuple(map(_conflict, found.conflicts)),
        () if policy.shadow else _looks(found),
        () if policy.shadow else tuple(_findings(found)),
        _ask(decision),
        tuple(limits(found)),
        tuple("; ".join(words.entries(group)) for group in found.disagreements),
        tuple(left_out(read.issues)) if read else (),
        found.rules_version,
    )


def _read(chart: Any, examination: Examination, now: datetime) -> Chart:
    log = Log()
    others = [
        found
        for found in gather(chart, log)
        if not identifiers(found.resource.get("identifier")) & examination.names
    ]
    return read_gathered(others, examination.own.exam, now, log)


def _ask(decision: Decision) -> str:
    return decision.ask.text if decision.ask else ""


def _shown(card: Card, found: Review) -> ShownCard:
    entries = tuple(words.entries(card.entries))
    if card.level == "urgent":
        # its rules would name a diagnosis
        return ShownCard(card, _LEVELS[card.level], entries, (), (), ())
    about = {ground.item.key for c in card.conclusions for ground in c.subject}
    said = {c.rule.id for c in card.conclusions}
    needs = [
        c
        for c in found.prerequisites
        if c.rule.id not in said and _speaks(c) and any(g.item.key in about for g in c.subject)
    ]
    return ShownCard(
        card,
        _LEVELS[card.level],
        entries,
        tuple(map(_basis, card.conclusions)),
        tuple(map(_basis, sorted(needs, key=_place))),
        tuple(f"{words.label(look.item.id)}: {look.action}" for look in card.looks),
    )


def _speaks(conclusion: Conclusion) -> bool:
    return not (conclusion.silenced_by or conclusion.merged_into or conclusion.rule.tier is Tier.U)


def _place(conclusion: Conclusion) -> tuple[int, str]:
    return list(STANDS).index(conclusion.outcome), conclusion.rule.id


def _basis(conclusion: Conclusion) -> Basis:
    rule = conclusion.rule
    grounds = dict.fromkeys(words.ground(one) for one in conclusion.grounds)
    return Basis(
        rule.id,
        conclusion.outcome.value,
        STANDS[conclusion.outcome],
        words.said(conclusion.subject[0].item) if conclusion.subject else "",
        _sentence(conclusion),
        tuple(grounds),
        tuple(dict.fromkeys(words.label(id_) for id_ in conclusion.unknown)),
        tuple(words.cutoff(one) for one in cutoffs_of(rule)),
        rule.source,
        _SEEN.get(rule.seen, rule.seen),
        conclusion.strength.value,
        rule.mechanism,
    )


def _sentence(conclusion: Conclusion) -> str:
    """What fired says its own sentence; of what did not, the page says what was looked for, and why."""
    rule = conclusion.rule
    if conclusion.outcome not in _SILENT or rule.other is None or rule.relation not in _LOOKED_FOR:
        return conclusion.text
    return f"{_LOOKED_FOR[rule.relation]} {in_words(rule.other)}. {rule.mechanism}"


def _conflict(conflict: ConflictSet) -> tuple[tuple[str, ...], tuple[str, ...]]:
    return tuple(words.entries(conflict.items)), conflict.rules


def _looks(found: Review) -> tuple[str, ...]:
    return tuple(f"{words.said(look.item)}: {look.action}" for look in found.repair.looks)


def _findings(found: Review) -> Iterator[tuple[str, tuple[Basis, ...]]]:
    """Every finding that some rule is about, with each rule's result."""
    groups: Sequence[Conclusion] = (
        *found.contradictions, *found.prerequisites, *found.companions, *found.explanations, *found.notes,
    )  # fmt: skip
    by_subject: dict[str, dict[str, Conclusion]] = {}
    for conclusion in groups:
        if conclusion.subject and _speaks(conclusion):
            subject = words.said(conclusion.subject[0].item)
            by_subject.setdefault(subject, {}).setdefault(conclusion.rule.id, conclusion)
    for subject in sorted(by_subject):
        yield subject, tuple(_basis(c) for c in sorted(by_subject[subject].values(), key=_place))
