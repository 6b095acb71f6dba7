"""Each line of a map as a function of the record being read; tables and entries are made once."""

from __future__ import annotations

from dataclasses import replace
from typing import NamedTuple

from fhirgallop.exam.entry import Entry, Qualifier
from fhirgallop.exam.presence import Presence
from fhirgallop.intake.record import Field, Value
from fhirgallop.mapping import boxes
from fhirgallop.mapping.boxes import NOTHING, Says
from fhirgallop.mapping.conditions import test_of
from fhirgallop.mapping.describing import Describes, constants, describer
from fhirgallop.mapping.marks import own_notes, own_time
from fhirgallop.mapping.naming import NamingLine
from fhirgallop.mapping.preparation import TAKEN_OUT, Tools, when_blank
from fhirgallop.mapping.run import LineReading, Run, Test, is_plain
from fhirgallop.mapping.template_map import Line
from fhirgallop.mapping.wordings import words_of
from fhirgallop.mapping.words_line import WordsLine


def reading_of(line: Line, tools: Tools) -> LineReading:
    """The function that reads one line."""
    test = test_of(line.when, tools.blanks) if line.when else None
    if line.named:
        return _guarded(NamingLine(line, tools).read, test)
    if line.words:
        return _guarded(WordsLine(line, line.words, tools).read, test)
    if not line.finding:
        return _guarded(_remark(line, tools), test)
    return _guarded(_FindingLine(line, tools).reading(), test)


def _guarded(reading: LineReading, test: Test | None) -> LineReading:
    if test is None:
        return reading
    holds = test

    def guarded(run: Run) -> None:
        if holds(run):
            reading(run)

    return guarded


def _remark(line: Line, tools: Tools) -> LineReading:
    def read(run: Run) -> None:
        run.settled.add(line.note)
        field = run.fields.get(line.note)
        if field is not None and field.status not in ("entered-in-error", *TAKEN_OUT):
            run.notes += [words_of(value) for value in tools.blanks.filled(field)]
            run.notes += own_notes(run, field)

    return read


class _FindingLine:
    """A line about one finding."""

    def __init__(self, line: Line, tools: Tools) -> None:
        self._line = line
        self._tools = tools
        self._blank = when_blank(line, line.finding, line.blank_means)
        self._constants = constants(line.qualifiers)
        self._describers: list[tuple[str, Describes]] = [
            (source.field, describer(source, tools.policy)) for source in line.qualifiers if source.field
        ]
        self._details = tuple(line.details())
        self._describing = tuple(line.describing())
        self._time = tools.line_time(line)

    def reading(self) -> LineReading:
        """The quickest function that reads the line as it is."""
        if self._line.presence:
            return self._constant(self._line.presence)
        says = self._says()
        return self._box(says)

    def _says(self) -> Says:
        line, tools = self._line, self._tools
        definition = tools.catalogue.findings[line.finding]
        if line.number:
            parts = tools.parts.get(line.field, 1)
            return boxes.number_box(
                line, definition, tools.units, tools.policy, tools.blanks, parts=parts, blank=self._blank
            )
        if line.text:
            return boxes.text_box(line, tools.policy)
        if line.choice is None:  # pragma: no cover  (reading a map refuses such a line)
            raise ValueError(line)
        if line.choice.several:
            return boxes.choices_box(line, line.choice, tools.policy)
        return boxes.choice_box(line, line.choice, definition, tools.policy)

    def _box(self, says: Says) -> LineReading:
        line, blank, filled = self._line, self._blank, self._tools.blanks.filled
        name, conditional, described = (
            line.field,
            line.when is not None,
            bool(line.qualifiers or line.note or line.time),
        )
        exact = {}
        if line.choice and not line.choice.several and not described:
            exact = boxes.lookup(line, line.choice, self._tools.policy).exact

        def read(run: Run) -> None:
            field = run.fields.get(name)
            if conditional:
                run.settled.add(name)
            if field is None:
                if blank and run.blank_for_missing(name):
                    self._put(run, blank, None)
                return
            if not is_plain(field):
                self._marked(run, field, says)
                return
            values = field.values
            if len(values) == 1 and type(values[0]) is str and (entry := exact.get(values[0])) is not None:
                if entry is not NOTHING:
                    run.entries.append(entry)  # type: ignore[arg-type]
                return
            values = filled(field)
            if not values:
                if blank:
                    self._put(run, blank, field)
                return
            self._read(run, field, values, says)

        return read

    def _read(self, run: Run, field: Field, values: tuple[Value, ...], says: Says) -> None:
        before = len(run.issues)
        entry = says(run, values)
        if entry:
            self._put(run, entry, field)
        elif len(run.issues) > before:
            run.settled.update(self._details)
        elif field.notes:
            run.notes += own_notes(run, field)

    def _marked(self, run: Run, field: Field, says: Says) -> None:
        """A box that says more than its values: a status, a time, or remarks of its own."""
        line = self._line
        presence = TAKEN_OUT.get(field.status)
        values = self._tools.blanks.filled(field)
        if presence:
            reason = "" if presence is Presence.NOT_EXAMINED else "Cancelled by the sender."
            self._put(
                run,
                Entry(line.finding, presence, instance=line.instance, reason=reason, fields=(line.field,)),
                field,
            )
        elif field.status == "entered-in-error":
            self._put(run, self._withdrawn(run, field, says), field)
        elif values:
            self._read(run, field, values, says)
        elif self._blank:
            self._put(run, self._blank, field)
        elif field.notes:
            run.notes += own_notes(run, field)

    def _withdrawn(self, run: Run, field: Field, says: Says) -> Entry:
        """What was taken back need not be readable any more."""
        values, line = self._tools.blanks.filled(field), self._line
        aside = Run(run.record)
        entry = says(aside, values) if values else None
        if entry is None:
            entry = Entry(line.finding, Presence.NOT_EXAMINED, instance=line.instance, fields=(line.field,))
        return replace(entry, withdrawn=True)

    def _constant(self, presence: Presence) -> LineReading:
        line, tools = self._line, self._tools
        base = Entry(line.finding, presence, instance=line.instance)
        withdrawn = replace(base, withdrawn=True)

        def read(run: Run) -> None:
            filled = [
                field
                for name in self._describing
                if (field := run.fields.get(name)) and tools.blanks.filled(field)
            ]
            taken_back = bool(filled) and all(field.status == "entered-in-error" for field in filled)
            self._put(run, withdrawn if taken_back else base, filled[0] if filled else None)

        return read

    def _put(self, run: Run, base: Entry, carrier: Field | None) -> None:
        """Adds the entry with its qualifiers, its own time and its remarks."""
        plain = carrier is None or is_plain(carrier)
        if plain and not self._line.qualifiers and not self._line.note and not self._time:
            run.entries.append(base)
            return
        qualifiers = self._constants(base).copy()
        fields, notes = list(base.fields), list(base.notes)
        for name, describes in self._describers:
            self._describe(run, name, describes, base, qualifiers, fields, notes)
        self._note(run, fields, notes)
        time = self._time.read(run) if self._time else ""
        if carrier is not None and not plain:
            time = own_time(run, carrier, self._tools.record, time)
            notes += own_notes(run, carrier)
        said = _Said(qualifiers, tuple(notes), time, tuple(dict.fromkeys(fields)), base.withdrawn)
        apart = tuple(said.of(one) for one in base.apart)
        run.entries.append(said.of(base, apart))

    def _describe(
        self,
        run: Run,
        name: str,
        describes: Describes,
        base: Entry,
        qualifiers: list[Qualifier],
        fields: list[str],
        notes: list[str],
    ) -> None:
        field = run.fields.get(name)
        if field is None:
            return
        run.settled.add(name)
        values = self._tools.blanks.filled(field)
        if not values:
            return
        if field.status in ("entered-in-error", "cancelled", "not-asked") and not base.withdrawn:
            words = f"This detail is marked as {field.status} by the sender and was left out."
            run.issue("information", "informational", "map-detail-withdrawn", words, name)
            return
        if not is_plain(field):
            notes += own_notes(run, field)
        fields.append(name)
        qualifiers += describes(run, values)

    def _note(self, run: Run, fields: list[str], notes: list[str]) -> None:
        name = self._line.note
        if name:
            run.settled.add(name)
            if values := self._tools.blanks.filled(run.fields.get(name)):
                notes += [words_of(value) for value in values]
                fields.append(name)


class _Said(NamedTuple):
    """What the boxes around it say of an entry."""

    qualifiers: list[Qualifier]
    notes: tuple[str, ...]
    time: str
    fields: tuple[str, ...]
    withdrawn: bool

    def of(self, base: Entry, apart: tuple[Entry, ...] = ()) -> Entry:
        """The entry, described."""
        return Entry(
            base.finding,
            base.presence,
            base.answers,
            base.measure,
            base.text,
            _in_order([*base.qualifiers, *self.qualifiers]),
            base.instance,
            base.reason,
            self.notes,
            self.withdrawn,
            self.time,
            self.fields,
            base.said,
            apart,
        )


def _in_order(qualifiers: list[Qualifier]) -> tuple[Qualifier, ...]:
    if len(qualifiers) < 2:
        return tuple(qualifiers)
    return tuple(sorted(dict.fromkeys(qualifiers), key=lambda q: (q.axis, q.value, q.text)))
