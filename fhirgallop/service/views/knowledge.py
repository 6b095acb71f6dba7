"""The rules as a reviewer reads them: what each says, why, from where, and how it fares by month."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from datetime import datetime
from typing import Final

from fhirgallop.cards import words
from fhirgallop.cards.build import answered
from fhirgallop.cards.conditions import in_words
from fhirgallop.codes import fhirjson
from fhirgallop.reasoning.conclusion import cutoffs_of
from fhirgallop.reasoning.rule import Rule
from fhirgallop.reasoning.rulebook import Rulebook
from fhirgallop.reasoning.vocabulary import Relation, Tier
from fhirgallop.service.views.answering import LABELS
from fhirgallop.storage.rule_counts import AnswerMonth, RuleMonth

MONTHS: Final = 12
TIERS: Final = {
    Tier.U: "urgent",
    Tier.T1: "interrupts",
    Tier.T2: "advises",
    Tier.T3: "in the detail panel",
    Tier.T0: "never shown by itself",
}
_OTHER: Final = {
    Relation.REQUIRES: "needs",
    Relation.CONTRADICTS: "does not go with",
    Relation.CHECK: "is asked about when",
    Relation.EXPECTS: "comes with",
    Relation.SUGGESTS: "suggests",
    Relation.FOLLOWS: "follows on",
    Relation.GUARD: "together with",
}
SEEN: Final = {
    "excerpt": "abstract or excerpt read",
    "memory": "from memory of published literature, not read again",
    "practice": "common practice, no source",
    "definition": "definition",
}


@dataclass(frozen=True, slots=True)
class RuleText:
    """One rule in words; `terms` are its parts as (name, text), those that it has."""

    id: str
    subject: str
    relation: str
    other: str
    tier: str
    strength: str
    family: str
    mechanism: str
    source: str
    silenced: bool
    terms: tuple[tuple[str, str], ...]


@dataclass(slots=True)
class Fared:
    """How one rule fared in one month: times raised, shown, and answered, with the reasons given."""

    raised: int = 0
    shown: int = 0
    accepted: int = 0
    overridden: int = 0
    reasons: Counter[str] = field(default_factory=Counter)


@dataclass(frozen=True, slots=True)
class Fares:
    """How rules fared: by rule, then by month, over these months (`2026-12`), the earliest first."""

    months: tuple[str, ...]
    by_rule: Mapping[str, Mapping[str, Fared]]

    def of(self, rule: str) -> list[tuple[str, Fared]]:
        """Each month of one rule."""
        known = self.by_rule.get(rule, {})
        return [(month, known.get(month) or Fared()) for month in self.months]

    def total(self, rule: str) -> Fared:
        """All months of one rule together."""
        return _summed(self.by_rule.get(rule, {}).values())

    def all(self) -> list[tuple[str, Fared]]:
        """Each month of all rules together."""
        return [
            (month, _summed(one[month] for one in self.by_rule.values() if month in one))
            for month in self.months
        ]


def rule_text(rule: Rule, book: Rulebook) -> RuleText:
    """One rule in words."""
    family = book.families.get(rule.family)
    terms = (
        ("Only when", in_words(rule.when) if rule.when else ""),
        ("Silent where", in_words(rule.unless) if rule.unless else ""),
        ("Holds also in", ", ".join(sorted(rule.holds_in))),
        ("Sentence of its card", "urgent clinical review" if rule.tier is Tier.U else rule.wording),
        ("Mechanism", rule.mechanism),
        ("Literature", rule.source),
        ("How it was read", SEEN.get(rule.seen, rule.seen)),
        ("Second reading", rule.reading.replace("-", " ")),
        ("Confidence", rule.confidence),
        ("Cut-offs in force", "; ".join(words.cutoff(one) for one in cutoffs_of(rule))),
        ("Remark", rule.note),
    )
    return RuleText(
        rule.id,
        in_words(rule.subject),
        _OTHER[rule.relation],
        in_words(rule.other) if rule.other else "",
        TIERS[rule.tier],
        rule.strength.value,
        family.title if family else "",
        rule.mechanism,
        rule.source,
        rule.id in book.silenced,
        tuple((name, text) for name, text in terms if text),
    )


def found(book: Rulebook, query: str, tier: str) -> Iterator[RuleText]:
    """The rules in which every word of the query stands, loudest first; `tier` as in TIERS, empty for all."""
    wanted = query.casefold().split()
    order = list(Tier)
    for rule in sorted(book.rules.values(), key=lambda one: (order.index(one.tier), one.id)):
        if tier and TIERS[rule.tier] != tier:
            continue
        text = rule_text(rule, book)
        all_ = " ".join((text.id, text.subject, text.other, text.family, *(t for _, t in text.terms)))
        if all(word in all_.casefold() for word in wanted):
            yield text


def last_months(now: datetime) -> tuple[str, ...]:
    """The last twelve months, this one included, the earliest first."""
    place = now.year * 12 + now.month - 1
    return tuple(f"{one // 12:04}-{one % 12 + 1:02}" for one in range(place - MONTHS + 1, place + 1))


def fares(months: Sequence[str], raised: Iterable[RuleMonth], answers: Iterable[AnswerMonth]) -> Fares:
    """How the rules fared, from what was counted."""
    by_rule: dict[str, dict[str, Fared]] = {}
    for count in raised:
        fared = by_rule.setdefault(count.rule, {}).setdefault(count.month, Fared())
        fared.raised += count.count
        if count.fate == "shown":
            fared.shown += count.count
    for answer in answers:
        known = answered(answer.reason, answer.reason_system)
        reason = LABELS[known] if known else ("a reason of the site" if answer.reason else "no coded reason")
        for rule in fhirjson.read(answer.shown)[0]["rules"]:
            fared = by_rule.setdefault(rule, {}).setdefault(answer.month, Fared())
            if answer.outcome == "accepted":
                fared.accepted += answer.count
            else:
                fared.overridden += answer.count
                fared.reasons[reason] += answer.count
    return Fares(tuple(months), by_rule)


def _summed(several: Iterable[Fared]) -> Fared:
    total = Fared()
    for one in several:
        total.raised += one.raised
        total.shown += one.shown
        total.accepted += one.accepted
        total.overridden += one.overridden
        total.reasons.update(one.reasons)
    return total
