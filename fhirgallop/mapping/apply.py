"""Applies a template map to a record: what the clinician meant, and everything that did not map."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from typing import Final

from fhirgallop.codes import units
from fhirgallop.exam.catalogue import Catalogue
from fhirgallop.exam.exam import Exam
from fhirgallop.intake.record import LocalRecord
from fhirgallop.mapping.compiled import reading_of
from fhirgallop.mapping.conditions import only_tested
from fhirgallop.mapping.line_and_boxes import side_by_side
from fhirgallop.mapping.marks import own_notes
from fhirgallop.mapping.preparation import Tools
from fhirgallop.mapping.run import Run, UnknownValue, is_plain
from fhirgallop.mapping.template_map import TemplateMap
from fhirgallop.outcome import Issue

__all__ = ["ONLY_TESTED", "CompiledMap", "Mapped", "UnknownValue", "apply", "compiled"]

# Rule id: a filled box that conditions look at, and whose wording none of them lists.
ONLY_TESTED: Final = "map-value-only-tested"


@dataclass(frozen=True, slots=True)
class Mapped:
    """What a map made of one record.

    Attributes:
        exam: what could be read, also beside errors, so that all checks can run over it; nothing of it may be
            coded while `issues` hold an error. None where patient, identifier or time cannot be made out.
        issues: everything noticed, in the order of the map; never with a value of the record in the text.
        unread: fields that hold something no line has read.
        unknown: values that no line knows, for the sender's own eyes.
    """

    exam: Exam | None
    issues: tuple[Issue, ...]
    unread: tuple[str, ...] = ()
    unknown: tuple[UnknownValue, ...] = ()


def apply(record: LocalRecord, template: TemplateMap, catalogue: Catalogue) -> Mapped:
    """Reads one record by a map. Never raises on what a record holds."""
    return compiled(template, catalogue).apply(record)


class CompiledMap:
    """A map made ready once, to be applied to many records."""

    def __init__(self, template: TemplateMap, catalogue: Catalogue) -> None:
        self.template = template
        self._catalogue = catalogue
        tools = Tools.of(template, catalogue, units.table())
        self.blanks = tools.blanks
        self._record = tools.record
        self._readings = [reading_of(line, tools) for line in template.lines]
        self.reads = template.reads()
        self._always = frozenset(line.field for line in template.lines if line.field and not line.when)
        self._contingent = self._contingent_fields()
        self._tested = only_tested(template)
        self._ignored = frozenset(i.pattern for i in template.ignored if "*" not in i.pattern)
        self._known = self.reads | self._ignored
        self._patterns = [i for i in template.ignored if "*" in i.pattern]

    def _contingent_fields(self) -> list[str]:
        """Fields that are read only when a finding is there, or a condition holds."""
        named = dict.fromkeys(
            name
            for line in self.template.lines
            for name in (*line.details(), *((line.field,) if line.when and line.field else ()))
        )
        safe = self._always | frozenset(self.template.record.fields())
        return [name for name in named if name not in safe]

    def ignores(self, name: str) -> bool:
        """True when the map leaves this field out for a stated reason."""
        return name in self._ignored or any(pattern.covers(name) for pattern in self._patterns)

    def apply(self, record: LocalRecord) -> Mapped:
        """Reads one record."""
        run, reader = Run(record), self._record
        strangers = self._strangers(record)
        run.strangers = any(self.blanks.filled(record.fields[name]) for name in strangers)
        patient, identifier = reader.patient(run), reader.identifier(run)
        moment = run.moment = reader.time(run)
        status, encounter, examiner = reader.status(run), reader.encounter(run), reader.examiner(run)
        for reading in self._readings:
            reading(run)
        side_by_side(run, self._catalogue)
        self._only_tested(run)
        unread = self._unread(run, strangers)
        exam = None
        if patient and identifier and moment:
            template = self.template
            exam = Exam(
                patient,
                identifier,
                template.record.identifier.system,
                moment,
                tuple(run.entries),
                status,
                encounter,
                examiner,
                tuple(run.notes),
                template.stamp,
                template.local_system,
            )
        return Mapped(exam, tuple(run.issues), unread, tuple(run.unknown))

    def _strangers(self, record: LocalRecord) -> list[str]:
        """Fields that the map neither reads nor ignores."""
        # Most records hold nothing unknown, which one comparison of sets tells.
        if record.fields.keys() <= self._known:
            return []
        return [name for name in record.fields if name not in self._known and not self.ignores(name)]

    def _only_tested(self, run: Run) -> None:
        """Names boxes that only conditions look at where their wording is in no list; keeps their remarks."""
        for name, listed in self._tested.items():
            field = run.fields.get(name)
            if field is None:
                continue
            if not all(listed.find(value) for value in self.blanks.filled(field)):
                words = (
                    "This box only decides whether others are read; its wording is in no list, so it says "
                    "nothing here. List it, or map the box."
                )
                run.issue("information", "informational", ONLY_TESTED, words, name)
            if not is_plain(field):
                run.notes += own_notes(run, field)

    def _unread(self, run: Run, strangers: list[str]) -> tuple[str, ...]:
        """Names, and notes, everything that no line has read."""
        found = list(strangers)
        for name in strangers:
            words = "No line of the map reads this field; add a line, or ignore it with a reason."
            run.issue("warning", "incomplete", "map-field-unread", words, name)
        for name in self._contingent:
            if name not in run.settled and self.blanks.filled(run.fields.get(name)):
                words = (
                    "The field is filled in, but the finding that it describes is not "
                    "there, or the condition of its "
                    "line does not hold; it was not read. Correct the record, or the map."
                )
                run.issue("warning", "incomplete", "map-field-not-applied", words, name)
                found.append(name)
        if run.record.form == "table":
            for name in sorted(self.reads - run.fields.keys()):
                words = "The table has no column of this name, which the map reads; nothing is known of it."
                run.issue("warning", "incomplete", "map-field-missing", words, name)
        return tuple(found)


class _Pair:
    """A map and a catalogue, compared by identity."""

    __slots__ = ("catalogue", "template")

    def __init__(self, template: TemplateMap, catalogue: Catalogue) -> None:
        self.template = template
        self.catalogue = catalogue

    def __hash__(self) -> int:
        return hash((id(self.template), id(self.catalogue)))

    def __eq__(self, other: object) -> bool:
        return (
            isinstance(other, _Pair) and other.template is self.template and other.catalogue is self.catalogue
        )


def compiled(template: TemplateMap, catalogue: Catalogue) -> CompiledMap:
    """The map made ready; made once for each map object."""
    return _compiled(_Pair(template, catalogue))


@lru_cache(maxsize=64)
def _compiled(pair: _Pair) -> CompiledMap:
    return CompiledMap(pair.template, pair.catalogue)
