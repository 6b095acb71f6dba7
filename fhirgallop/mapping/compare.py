"""What a changed map would change: the same records read by two versions, entry by entry."""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass, field, replace
from typing import Final, Literal

from fhirgallop.exam.catalogue import Catalogue
from fhirgallop.exam.entry import Entry
from fhirgallop.exam.exam import Exam
from fhirgallop.intake.record import LocalRecord
from fhirgallop.mapping.apply import CompiledMap, Mapped, compiled
from fhirgallop.mapping.template_map import TemplateMap
from fhirgallop.outcome import has_errors

Change = Literal["appears", "vanishes", "changes"]
_EXAMPLES: Final = 5


@dataclass(slots=True)
class Difference:
    """How often entries of one finding come out otherwise, for one kind of change.

    Attributes:
        finding: catalogue id.
        change: seen from the old version.
        fields: local fields that these entries were read from, with counts.
        count: entries.
        examples: positions of the first records it happened in, from 0; never what they hold.
    """

    finding: str
    change: Change
    fields: Counter[str] = field(default_factory=Counter)
    count: int = 0
    examples: list[int] = field(default_factory=list)


class Comparison:
    """Counts over the records that were added; memory does not grow with their number."""

    def __init__(self, old: TemplateMap, new: TemplateMap, catalogue: Catalogue) -> None:
        self._old: CompiledMap = compiled(old, catalogue)
        self._new: CompiledMap = compiled(new, catalogue)
        self._found: dict[tuple[str, Change], Difference] = {}
        self.records = 0
        self.touched = 0
        self.newly_refused = 0
        self.newly_coded = 0
        self.other_identity = 0

    def add(self, record: LocalRecord) -> None:
        """Reads one record by both versions."""
        before, after = self._old.apply(record), self._new.apply(record)
        old, new = _coded(before), _coded(after)
        self.newly_refused += old is not None and new is None
        self.newly_coded += old is None and new is not None
        self.other_identity += old is not None and new is not None and _identity(old) != _identity(new)
        self.touched += self._compared(_entries(old), _entries(new), self.records)
        self.records += 1

    def differences(self) -> list[Difference]:
        """Every difference, the most frequent first."""
        return sorted(self._found.values(), key=lambda one: (-one.count, one.finding, one.change))

    def _compared(
        self, old: dict[tuple[str, str], Entry], new: dict[tuple[str, str], Entry], at: int
    ) -> bool:
        touched = False
        for key in dict.fromkeys([*old, *new]):
            before, after = old.get(key), new.get(key)
            if before is not None and after is not None and _meaning(before) == _meaning(after):
                continue
            touched = True
            change: Change = "appears" if before is None else "vanishes" if after is None else "changes"
            self._note(key[0], change, after or before, at)
        return touched

    def _note(self, finding: str, change: Change, entry: Entry | None, at: int) -> None:
        difference = self._found.setdefault((finding, change), Difference(finding, change))
        difference.count += 1
        difference.fields.update(entry.fields if entry else ())
        if len(difference.examples) < _EXAMPLES:
            difference.examples.append(at)


def _coded(mapped: Mapped) -> Exam | None:
    return None if has_errors(mapped.issues) else mapped.exam


def _identity(exam: Exam) -> tuple[object, ...]:
    """What makes the same examination the same resources, and when it took place."""
    return (exam.patient, exam.identifier_system, exam.identifier, exam.time)


def _entries(exam: Exam | None) -> dict[tuple[str, str], Entry]:
    """What is coded, each entry by what makes it the same when sent again."""
    entries = exam.entries if exam else ()
    return {coded.key: coded for entry in entries for coded in entry.by_answer()}


def _meaning(entry: Entry) -> Entry:
    """An entry without what does not change what is coded: the field it came from."""
    return replace(entry, fields=())
