"""Counts of a run: small, mergeable, free of anything a record held (but for wordings, when asked for)."""

from __future__ import annotations

from collections import Counter
from collections.abc import Hashable, Iterable
from dataclasses import dataclass, field, fields
from typing import Any, Final, Self

from fhirgallop.bulk.coding import Coded
from fhirgallop.exam.exam import Exam
from fhirgallop.reasoning.review import Review

# Names of fields come from the input, which may be hostile: what is beyond so many is counted together.
MOST_KINDS: Final = 5_000
OTHERS: Final = "(others)"
UNKNOWN_YEAR: Final = "unknown"
OUTSIDE: Final = "outside"


@dataclass
class Tally:
    """What a part, or all of a run, gave.

    Attributes:
        became: records by what became of them.
        years: examinations coded, by year.
        findings: (year, finding, presence) of examinations that were coded.
        issues: (severity, rule, field).
        unread: fields that no line of the map reads.
        unknown: fields with a value that no line of the map knows.
        wordings: (field, wording) of such values; only when asked for.
        repeats: examinations that came before, by whether they are the "same" or "differs".
        reviewed: examinations that were held against the rules.
        rules: (tier, rule) that spoke, once an examination.
        tiers: examinations in which a rule of the tier spoke; or of patients that most rules are not for (a
            child, pregnancy).
    """

    became: Counter[tuple[str]] = field(default_factory=Counter)
    years: Counter[tuple[str]] = field(default_factory=Counter)
    findings: Counter[tuple[str, str, str]] = field(default_factory=Counter)
    issues: Counter[tuple[str, str, str]] = field(default_factory=Counter)
    unread: Counter[tuple[str]] = field(default_factory=Counter)
    unknown: Counter[tuple[str]] = field(default_factory=Counter)
    wordings: Counter[tuple[str, str]] = field(default_factory=Counter)
    repeats: Counter[tuple[str]] = field(default_factory=Counter)
    reviewed: Counter[tuple[()]] = field(default_factory=Counter)
    rules: Counter[tuple[str, str]] = field(default_factory=Counter)
    tiers: Counter[tuple[str]] = field(default_factory=Counter)

    def add(self, coded: Coded, *, wordings: bool) -> None:
        """Counts one record."""
        self.became[coded.became,] += 1
        for issue in coded.issues:
            _bump(
                self.issues, (issue.severity, issue.rule, issue.field), (issue.severity, issue.rule, OTHERS)
            )
        result = coded.result
        if result is None:
            return
        for name in result.unread:
            _bump(self.unread, (name,), (OTHERS,))
        for value in result.unknown:
            _bump(self.unknown, (value.field,), (OTHERS,))
            if wordings:
                _bump(self.wordings, (value.field, value.value), (value.field, OTHERS))
        if result.ok and result.exam is not None:
            self._found(result.exam)

    def _found(self, exam: Exam) -> None:
        year = exam.time.start[:4] or UNKNOWN_YEAR
        self.years[year,] += 1
        for entry in exam.entries:
            self.findings[year, entry.finding, entry.presence.value] += 1

    def add_review(self, review: Review) -> None:
        """Counts what the rules said of one examination."""
        self.reviewed[()] += 1
        spoke = {(c.tier.value, c.rule.id) for c in (*review.raised, *review.panel)}
        self.rules.update(spoke)
        self.tiers.update({(tier,) for tier, _ in spoke})
        if review.limits:
            self.tiers[OUTSIDE,] += 1

    def merge(self, other: Self) -> None:
        """Takes in the counts of another part."""
        for each in fields(self):
            mine = getattr(self, each.name)
            for key, count in getattr(other, each.name).items():
                spare = (*key[:-1], OTHERS) if key else key
                _bump(mine, key, spare, count)

    def records(self) -> int:
        """Records of the input, whatever became of them."""
        return self.became.total() - self.became["remark",]

    def as_dict(self) -> dict[str, Any]:
        """JSON values, in order."""
        return {
            each.name: [[*key, count] for key, count in sorted(getattr(self, each.name).items())]
            for each in fields(self)
        }

    @classmethod
    def read(cls, value: dict[str, Iterable[list[Any]]]) -> Self:
        """The tally that `as_dict` wrote."""
        return cls(
            **{name: Counter({tuple(row[:-1]): row[-1] for row in rows}) for name, rows in value.items()}
        )


def _bump(counter: Counter[Any], key: Hashable, spare: Hashable, by: int = 1) -> None:
    counter[key if key in counter or len(counter) < MOST_KINDS else spare] += by
