"""Conclusion: what one rule gave for one patient, with every entry, age and cut-off it rests on."""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum
from typing import Any, Final

from fhirgallop.reasoning.atoms import Atom
from fhirgallop.reasoning.items import Ground, Item
from fhirgallop.reasoning.rule import Rule
from fhirgallop.reasoning.vocabulary import URGENT_PHRASE, Cutoff, Strength, Tier, kinds


class Outcome(StrEnum):
    """How a rule came out."""

    MET = "met"
    UNMET = "unmet"
    CONFLICT = "conflict"
    CONFIRMED = "confirmed"
    MISSING = "missing"
    NOT_LOOKED_FOR = "not-looked-for"
    EXPLAINS = "explains"
    NOTE = "note"
    OPEN = "open"


FIRED: Final = frozenset({Outcome.UNMET, Outcome.CONFLICT, Outcome.MISSING, Outcome.EXPLAINS, Outcome.NOTE})
CONFLICTING: Final = frozenset({Outcome.UNMET, Outcome.CONFLICT})
BEARING: Final = frozenset({Strength.HARD, Strength.STRONG})
"""The strengths that make a conflict set."""


@dataclass(frozen=True, slots=True)
class Conclusion:
    """One rule's result.

    Attributes:
        strength, tier: after staleness, source trust and the caps of guards.
        subject: the entry the rule is about.
        grounds: everything else it rests on, all agreeing sources.
        sets: keys of smallest sets of items that bring it about, strongest first.
        unknown: what would have to be known, for an open question: ids, or `id#property`.
        silenced_by: guards that silence it.
        merged_into: the rule that says the same louder.
    """

    rule: Rule
    outcome: Outcome
    strength: Strength
    tier: Tier
    subject: tuple[Ground, ...]
    grounds: tuple[Ground, ...] = ()
    sets: tuple[frozenset[str], ...] = ()
    unknown: tuple[str, ...] = ()
    silenced_by: tuple[str, ...] = ()
    merged_into: str = ""

    @property
    def fired(self) -> bool:
        """True when it says something of its own."""
        return self.outcome in FIRED and not self.silenced_by and not self.merged_into

    @property
    def conflicts(self) -> bool:
        """True when it belongs into the conflict sets."""
        return self.outcome in CONFLICTING and self.strength in BEARING and not self.silenced_by

    @property
    def text(self) -> str:
        """The sentence of its card: for an urgent one the fixed phrase, never anything more."""
        if self.tier is Tier.U:
            return URGENT_PHRASE
        return self.rule.wording or self.rule.mechanism

    def as_dict(self) -> dict[str, Any]:
        """JSON values; an urgent one carries no mechanism or source, for these name a diagnosis."""
        rule = self.rule
        found: dict[str, Any] = {
            "rule": rule.id,
            "rows": list(rule.rows),
            "relation": rule.relation.value,
            "outcome": self.outcome.value,
            "strength": self.strength.value,
            "tier": self.tier.value,
            "family": rule.family,
            "text": self.text,
            "subject": [ground_dict(g) for g in self.subject],
            "grounds": [ground_dict(g) for g in self.grounds],
        }
        if self.tier is not Tier.U:
            found["mechanism"] = rule.mechanism
            found["source"] = {"text": rule.source, "seen": rule.seen, "confidence": rule.confidence}
            found["cutoffs"] = [cutoff_dict(c) for c in cutoffs_of(rule)]
        if self.unknown:
            found["unknown"] = list(self.unknown)
        if self.silenced_by:
            found["silenced_by"] = list(self.silenced_by)
        if self.merged_into:
            found["merged_into"] = self.merged_into
        return found


def cutoffs_of(rule: Rule) -> list[Cutoff]:
    """The named cut-offs a rule leans on."""
    found: dict[str, Cutoff] = {}
    for atom in rule.atoms():
        if isinstance(atom, Atom):
            for bound in atom.bounds:
                if bound.cutoff.name:
                    found[bound.cutoff.name] = bound.cutoff
    return list(found.values())


def cutoff_dict(cutoff: Cutoff) -> dict[str, Any]:
    """A cut-off in force, with its source and the other published values."""
    return {
        "name": cutoff.name,
        "value": str(cutoff.value),
        "unit": cutoff.unit,
        "source": cutoff.source,
        "alternatives": [{"value": str(value), "source": source} for value, source in cutoff.alternatives],
    }


def ground_dict(ground: Ground) -> dict[str, Any]:
    """An item with what weakens it here."""
    found = item_dict(ground.item)
    if ground.stale:
        found["stale"] = True
    if ground.imprecise:
        found["imprecise"] = True
    return found


def item_dict(item: Item) -> dict[str, Any]:
    """What an item says, from where, and how old it is (seconds before the examination)."""
    found: dict[str, Any] = {
        "id": item.id,
        "label": kinds()[item.id].label if item.id in kinds() else item.id,
        "state": item.state.value,
        "source": item.source.value,
        "time": item.time,
        "age": item.age,
        "place": item.place,
    }
    if item.answers:
        found["answers"] = list(item.answers)
    if item.measure is not None:
        found["value"] = str(item.measure.value)
        found["unit"] = item.measure.unit
        if item.measure.comparator:
            found["comparator"] = item.measure.comparator
        if item.measure.high is not None:
            found["high"] = str(item.measure.high)
    if item.qualifiers:
        found["qualifiers"] = [
            {"axis": q.axis, "value": q.value or (str(q.grade) if q.grade else q.text)}
            for q in item.qualifiers
        ]
    if item.low_trust:
        found["low_trust"] = True
    return found
