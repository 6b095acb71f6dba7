"""What a map makes of all sample records, and what it would change: counts for the eye and for the file."""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Final

from fhirgallop.exam import catalogue, checks
from fhirgallop.intake.record import LocalRecord
from fhirgallop.mapping.apply import apply
from fhirgallop.mapping.compare import Comparison
from fhirgallop.mapping.coverage import Coverage
from fhirgallop.mapping.template_map import TemplateMap
from fhirgallop.outcome import Issue

_MOST_KINDS: Final = 200


@dataclass(frozen=True, slots=True)
class Checked:
    """A map held against sample records.

    Attributes:
        coverage: counts of fields, lines and unknown values.
        refused: records that could not be coded as the map stands.
        issues: (an issue, how many records have its like), errors first.
        comparison: against the version in use; None where there is none.
    """

    coverage: Coverage
    refused: int
    issues: tuple[tuple[Issue, int], ...]
    comparison: Comparison | None

    def counts(self) -> Mapping[str, Any]:
        """The result for the history: numbers, and names of fields and findings; nothing of a record."""
        uses = Counter(count.use for count in self.coverage.fields())
        found: dict[str, Any] = {
            "records": self.coverage.records,
            "refused": self.refused,
            "fields": {"mapped": uses["read"], "ignored": uses["ignored"], "open": uses["unread"]},
            "unknown_values": len(self.coverage.unknown()),
            "issues": [{"rule": i.rule, "field": i.field, "times": n} for i, n in self.issues],
        }
        if self.comparison is not None:
            found["changes"] = [
                {"finding": one.finding, "change": one.change, "entries": one.count}
                for one in self.comparison.differences()
            ]
        return found


def check(records: Sequence[LocalRecord], template: TemplateMap, in_use: TemplateMap | None) -> Checked:
    """Reads every record by the map, and by the version in use."""
    known = catalogue.load()
    coverage = Coverage(template, known)
    comparison = Comparison(in_use, template, known) if in_use is not None else None
    counts: Counter[tuple[str, str, int]] = Counter()
    first: dict[tuple[str, str, int], Issue] = {}
    refused = 0
    for record in records:
        mapped = apply(record, template, known)
        coverage.add(record, mapped)
        found = [*mapped.issues, *(checks.check(mapped.exam, known) if mapped.exam else ())]
        refused += any(issue.is_error for issue in found) or mapped.exam is None
        for kind, issue in {(i.rule, i.field, i.line): i for i in found}.items():
            if kind in first or len(first) < _MOST_KINDS:
                counts[kind] += 1
                first.setdefault(kind, issue)
        if comparison is not None:
            comparison.add(record)
    issues = sorted(first, key=lambda kind: (not first[kind].is_error, -counts[kind], kind))
    return Checked(coverage, refused, tuple((first[kind], counts[kind]) for kind in issues), comparison)
