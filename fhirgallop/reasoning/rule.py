"""Rule: one or more rows of the evidence as a frozen value, ready to be judged."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

from fhirgallop.reasoning.atoms import Atom
from fhirgallop.reasoning.conditions import Condition
from fhirgallop.reasoning.vocabulary import Relation, Strength, Tier


@dataclass(frozen=True, slots=True)
class Reach:
    """Which rules a guard means: by rule id, card family or finding, less the exceptions.

    `not_for` means every rule that does not say it holds in that group (child, pregnancy).
    """

    rules: frozenset[str] = frozenset()
    families: frozenset[str] = frozenset()
    findings: frozenset[str] = frozenset()
    not_for: frozenset[str] = frozenset()
    except_rules: frozenset[str] = frozenset()
    except_families: frozenset[str] = frozenset()

    def covers(self, rule: Rule) -> bool:
        """True when `rule` is meant."""
        if rule.id in self.except_rules or rule.family in self.except_families:
            return False
        if any(group not in rule.holds_in for group in self.not_for):
            return True
        return rule.id in self.rules or rule.family in self.families or rule.finding in self.findings


@dataclass(frozen=True, slots=True, eq=False)
class Rule:
    """One rule.

    Attributes:
        id: stable public id; an urgent rule's id names no diagnosis, for it is shown.
        rows: rows of the evidence it carries out.
        subject: what must be recorded for the rule to be looked at.
        when, unless: circumstances under which it holds, and which silence it.
        other: what is required, contradicted, expected or suggested; the fault, for a check.
        suppresses, caps, cap: what a guard silences, or keeps at most at tier `cap`.
        only_with_conflict: a guard's note that is shown only beside a conflict about the same finding.
        holds_in: groups (child, pregnancy) for which it is meant too; definitions hold in all.
        seen: how the source is known (excerpt, memory, practice, definition).
        reading: verdict of the second reading, where there was one.
        file, line: where it is written.
    """

    id: str
    rows: tuple[str, ...]
    relation: Relation
    subject: Atom
    when: Condition | None
    unless: Condition | None
    other: Condition | None
    strength: Strength
    tier: Tier
    family: str
    yields_to: tuple[str, ...]
    suppresses: Reach | None
    caps: Reach | None
    cap: Tier
    only_with_conflict: bool
    holds_in: frozenset[str]
    source: str
    seen: str
    reading: str
    confidence: str
    mechanism: str
    wording: str
    note: str
    file: str
    line: int

    @property
    def finding(self) -> str:
        """Id of the subject, by which rules are found."""
        return self.subject.fact

    def atoms(self) -> Iterator[Condition]:
        """Every elementary condition of the rule, its subject first."""
        yield self.subject
        for condition in (self.when, self.unless, self.other):
            if condition is not None:
                yield from condition.atoms()
