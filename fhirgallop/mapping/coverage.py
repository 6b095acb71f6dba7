"""Coverage: how well a map fits many records, for the informatician who keeps it."""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass
from typing import Final, Literal

from fhirgallop.exam.catalogue import Catalogue
from fhirgallop.intake.record import LocalRecord
from fhirgallop.mapping.apply import ONLY_TESTED, Mapped, compiled
from fhirgallop.mapping.conditions import test_of
from fhirgallop.mapping.run import Run, Test, UnknownValue
from fhirgallop.mapping.template_map import Line, TemplateMap
from fhirgallop.outcome import Issue

# Names and values come from outside: how many different ones are told apart is bounded.
MAX_DISTINCT: Final = 10_000
FieldUse = Literal["read", "ignored", "unread"]


@dataclass(frozen=True, slots=True)
class FieldCount:
    """One field over all records: what the map does with it, and how often it was filled or blank."""

    name: str
    use: FieldUse
    filled: int
    blank: int


@dataclass(frozen=True, slots=True)
class LineCount:
    """One line of the map: in how many records its condition held and its box said something."""

    line: int
    says: str
    field: str
    records: int


class Coverage:
    """Counts over the records that were added."""

    def __init__(self, template: TemplateMap, catalogue: Catalogue) -> None:
        self.template = template
        self.records = 0
        self.coded = 0
        self.further = 0
        self._map = compiled(template, catalogue)
        self._filled: Counter[str] = Counter()
        self._blank: Counter[str] = Counter()
        self._unknown: Counter[UnknownValue] = Counter()
        self._touched: Counter[int] = Counter()
        self._only_tested: Counter[str] = Counter()
        self._tests: list[tuple[int, Line, Test | None]] = [
            (at, line, test_of(line.when, self._map.blanks) if line.when else None)
            for at, line in enumerate(template.lines)
        ]

    def add(self, record: LocalRecord, mapped: Mapped) -> None:
        """Counts one record and what the map made of it."""
        self.records += 1
        self.coded += mapped.exam is not None and not any(issue.is_error for issue in mapped.issues)
        filled = self._map.blanks.filled
        for name, field in record.fields.items():
            if name in self._filled or name in self._blank or self._room(self._filled, self._blank):
                (self._filled if filled(field) else self._blank)[name] += 1
        for unknown in mapped.unknown:
            if unknown in self._unknown or self._room(self._unknown):
                self._unknown[unknown] += 1
        self._only_tested.update(issue.field for issue in mapped.issues if issue.rule == ONLY_TESTED)
        run = Run(record)
        for at, line, test in self._tests:
            box = line.field or line.note
            if (test is None or test(run)) and (
                line.presence is not None
                or filled(record.fields.get(box))
                or (line.blank_means != "not-recorded" and box in record.fields)
            ):
                self._touched[at] += 1

    def _room(self, *counters: Counter[str] | Counter[UnknownValue]) -> bool:
        if sum(len(counter) for counter in counters) < MAX_DISTINCT:
            return True
        self.further += 1
        return False

    def fields(self) -> list[FieldCount]:
        """Every field that was seen, in the order of its first appearance, and those only the map names."""
        names = dict.fromkeys([*self._filled, *self._blank, *sorted(self._map.reads)])
        return [FieldCount(name, self._use(name), self._filled[name], self._blank[name]) for name in names]

    def _use(self, name: str) -> FieldUse:
        if name in self._map.reads:
            return "read"
        return "ignored" if self._map.ignores(name) else "unread"

    def unknown(self) -> list[tuple[UnknownValue, int]]:
        """Values that no line knows, the most frequent first."""
        return sorted(self._unknown.items(), key=lambda item: (-item[1], item[0].field, item[0].value))

    def lines(self) -> list[LineCount]:
        """Every line of the map with the number of records that touched it."""
        return [
            LineCount(
                line.line,
                ", ".join(f for f, _ in line.gives()) or "remark",
                line.field or line.note,
                self._touched[at],
            )
            for at, line, _ in self._tests
        ]

    def issues(self) -> list[Issue]:
        """What the informatician should look at: once for each field or line, with counts."""
        found = []
        for count in self.fields():
            if count.use == "unread":
                words = (
                    f"No line reads this field, which {_records(count.filled)} filled in; add a line, or "
                    "ignore it with a reason."
                )
                found.append(self._issue("map-field-unread", words, count.name))
            elif self.records and count.use == "read" and not count.filled + count.blank:
                words = "The map reads this field, but no record has it; check how its name is written."
                found.append(self._issue("map-field-never-seen", words, count.name))
        by_field: Counter[str] = Counter()
        for value, times in self._unknown.items():
            by_field[value.field] += times
        for name, times in by_field.items():
            words = f"Wordings that the map does not know were met {times} times; add them to its line."
            found.append(self._issue("map-value-unknown", words, name))
        for name, times in self._only_tested.items():
            words = (
                f"This box only decides whether others are read; in {_records(times)} its wording is in no "
                "list, so it said nothing. List it, or map the box."
            )
            found.append(self._information(ONLY_TESTED, words, name))
        for line in self.lines():
            if self.records and not line.records:
                words = (
                    f"No record said anything by this line ({line.says}): its box was always blank or "
                    "missing, or its when never held. Check both, if that is unexpected."
                )
                found.append(self._information("map-line-untouched", words, line.field, line.line))
        return found

    def _issue(self, rule: str, words: str, name: str) -> Issue:
        return Issue("warning", "incomplete", rule, words, field=name[:200], source=self.template.name)

    def _information(self, rule: str, words: str, name: str, line: int = 0) -> Issue:
        source = self.template.name
        return Issue("information", "informational", rule, words, field=name[:200], source=source, line=line)


def _records(count: int) -> str:
    return "one record" if count == 1 else f"{count} records"
