"""Review: one examination held against the chart and the rules, with everything it rests on.

    review(exam, context) -> Review

Supports and does not replace clinical judgement: it never says which entry is wrong, names no diagnosis as
fact, proposes no drug, dose or procedure, and the absence of a conclusion is no reassurance.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any, Final

from fhirgallop.exam.context import Context
from fhirgallop.exam.exam import Exam
from fhirgallop.reasoning.changes import Change, changes
from fhirgallop.reasoning.conclusion import CONFLICTING, Conclusion, Outcome, item_dict
from fhirgallop.reasoning.conflicts import ConflictSet, Repair, conflict_sets, repair
from fhirgallop.reasoning.engine import conclude
from fhirgallop.reasoning.items import Item, ItemTable, collect
from fhirgallop.reasoning.likelihood import Likelihood, Pretest, likelihoods
from fhirgallop.reasoning.questions import Datum, next_datum
from fhirgallop.reasoning.rulebook import Rulebook, load
from fhirgallop.reasoning.vocabulary import Relation, Tier

NOTICE: Final = (
    "Supports and does not replace clinical judgement. Local protocols come first. Not validated "
    "prospectively. That nothing is shown is no reassurance. Bedside findings have poor observer agreement."
)


@dataclass(frozen=True, slots=True)
class Settings:
    """What the user gives to one review: pretest probabilities by target, for likelihood ratios."""

    pretests: Mapping[str, Pretest] = field(default_factory=dict)


@dataclass(frozen=True, slots=True)
class Review:
    """The result.

    Attributes:
        urgent: combinations shown as the fixed phrase only.
        contradictions: conflicts that are neither silenced nor merged, loudest first.
        prerequisites: every required thing: met, unmet or open.
        companions: what is expected beside a finding: confirmed, missing, not looked for.
        explanations: causes that stand in the chart, unranked.
        notes: remarks of guards.
        limits: guards that put this patient outside most rules (a child, pregnancy).
        open: questions that nobody can answer from the record.
        silenced: what a guard or another rule kept back, and which.
        conflicts, repair: minimal conflict sets over hard and strong rules, and what to look at again.
        next_datum: what would settle most open questions.
        changes: against the last examination.
        disagreements: facts whose sources disagree about the same time; both are kept, neither is used.
        unusable: facts in the future, or with a number that cannot be read.
        likelihoods: only for pretest values given by the user.
        rules_version: digest of the rules used.
    """

    urgent: tuple[Conclusion, ...]
    contradictions: tuple[Conclusion, ...]
    prerequisites: tuple[Conclusion, ...]
    companions: tuple[Conclusion, ...]
    explanations: tuple[Conclusion, ...]
    notes: tuple[Conclusion, ...]
    limits: tuple[Conclusion, ...]
    open: tuple[Conclusion, ...]
    silenced: tuple[Conclusion, ...]
    conflicts: tuple[ConflictSet, ...]
    repair: Repair
    next_datum: Datum | None
    changes: tuple[Change, ...]
    disagreements: tuple[tuple[Item, ...], ...]
    unusable: tuple[Item, ...]
    likelihoods: tuple[Likelihood, ...]
    rules_version: str

    @property
    def raised(self) -> tuple[Conclusion, ...]:
        """Everything that may become a card: urgent, T1 and T2, loudest first."""
        return tuple(c for c in (*self.urgent, *self._speaking()) if c.tier in (Tier.U, Tier.T1, Tier.T2))

    @property
    def panel(self) -> tuple[Conclusion, ...]:
        """Everything for the detail panel (T3)."""
        return tuple(c for c in self._speaking() if c.tier is Tier.T3)

    def _speaking(self) -> list[Conclusion]:
        groups = (self.contradictions, self.companions, self.explanations, self.notes)
        return sorted((c for group in groups for c in group if c.fired), key=_loudness)

    def as_dict(self) -> dict[str, Any]:
        """JSON values, the same for the same input."""
        named: dict[str, Any] = {
            name: [c.as_dict() for c in getattr(self, name)]
            for name in (
                "urgent", "contradictions", "prerequisites", "companions", "explanations", "notes", "limits",
                "open", "silenced", "conflicts", "changes", "likelihoods",
            )
        }  # fmt: skip
        named["repair"] = self.repair.as_dict()
        named["next_datum"] = self.next_datum.as_dict() if self.next_datum else None
        named["disagreements"] = [[item_dict(item) for item in group] for group in self.disagreements]
        named["unusable"] = [item_dict(item) for item in self.unusable]
        named["rules_version"] = self.rules_version
        named["notice"] = NOTICE
        return named


def review(
    exam: Exam, context: Context, *, rules: Rulebook | None = None, settings: Settings | None = None
) -> Review:
    """Hold an examination against the chart.

    Args:
        exam: today's examination; withdrawn entries are not used.
        context: the same patient's chart, with the moment of the review.
        rules: a site's rules; the shipped ones when None.
        settings: pretest probabilities given by the user.

    Raises:
        ValueError: the chart is known to be another patient's.
    """
    ours, theirs = exam.patient, context.patient
    comparable = theirs is not None and (ours.system, ours.is_fhir_id) == (theirs.system, theirs.is_fhir_id)
    if comparable and theirs != ours:
        raise ValueError("the chart belongs to another patient than the examination")
    book = rules or load()
    table = collect(exam, context)
    concluded = conclude(book, table)
    all_ = concluded.conclusions
    items = _by_key(table)
    sets = conflict_sets(all_, items)
    spoken = [c for c in all_ if c.fired]
    disputed = concluded.view.disagreements
    return Review(
        urgent=_sorted(c for c in spoken if c.tier is Tier.U),
        contradictions=_sorted(c for c in spoken if c.outcome in CONFLICTING),
        prerequisites=_sorted(c for c in all_ if c.rule.relation is Relation.REQUIRES),
        companions=_sorted(
            c for c in all_ if c.rule.relation is Relation.EXPECTS and not c.silenced_by and not c.merged_into
        ),
        explanations=_sorted(c for c in spoken if c.outcome is Outcome.EXPLAINS and c.tier is not Tier.U),
        notes=_sorted(c for c in spoken if c.outcome is Outcome.NOTE),
        limits=_sorted(g for g in concluded.guards if g.rule.suppresses and g.rule.suppresses.not_for),
        open=_sorted(c for c in all_ if c.outcome is Outcome.OPEN and not c.silenced_by),
        silenced=_sorted(
            c for c in all_ if (c.silenced_by or c.merged_into) and c.outcome is not Outcome.OPEN
        ),
        conflicts=sets,
        repair=repair(sets, book.rechecks),
        next_datum=next_datum(all_, concluded.view, book.rechecks),
        changes=changes(table),
        disagreements=tuple(
            tuple(sorted(disputed[fact], key=lambda item: item.key)) for fact in sorted(disputed)
        ),
        unusable=table.unusable,
        likelihoods=likelihoods(book, concluded.view, (settings or Settings()).pretests),
        rules_version=book.version,
    )


def _by_key(table: ItemTable) -> dict[str, Item]:
    return {item.key: item for items in table.by_id.values() for item in items}


def _sorted(conclusions: Any) -> tuple[Conclusion, ...]:
    return tuple(sorted(conclusions, key=_loudness))


_TIERS: Final = tuple(Tier)


def _loudness(conclusion: Conclusion) -> tuple[int, str, str]:
    key = conclusion.subject[0].item.key if conclusion.subject else ""
    return (_TIERS.index(conclusion.tier), conclusion.rule.id, key)
