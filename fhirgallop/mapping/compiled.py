"""Each line of a map as a function of the record being read; tables and entries are made once."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

from fhirgallop.codes.units import UnitTable
from fhirgallop.exam.catalogue import Catalogue
from fhirgallop.exam.entry import Entry, Qualifier
from fhirgallop.exam.presence import Presence
from fhirgallop.intake.record import Field
from fhirgallop.mapping import boxes
from fhirgallop.mapping.boxes import NOTHING, Policy, Says
from fhirgallop.mapping.conditions import test_of
from fhirgallop.mapping.describing import Describes, constants, describer
from fhirgallop.mapping.record_reading import RecordReader
from fhirgallop.mapping.run import LineReading, Run, Test, is_plain
from fhirgallop.mapping.template_map import BlankMeans, Line, TemplateMap
from fhirgallop.mapping.wordings import Blanks, words_of

_BLANK_PRESENCE = {"absent": Presence.ABSENT, "not-examined": Presence.NOT_EXAMINED}
# What the sender says of a single box in place of its value (HL7 v2 OBX-11 X and N).
_TAKEN_OUT = {"cancelled": Presence.NOT_EXAMINABLE, "not-asked": Presence.NOT_EXAMINED}


@dataclass(frozen=True, slots=True)
class Tools:
    """What all lines of one map share."""

    catalogue: Catalogue
    units: UnitTable
    blanks: Blanks
    policy: Policy
    record: RecordReader
    parts: dict[str, int]

    @classmethod
    def of(cls, template: TemplateMap, catalogue: Catalogue, units: UnitTable) -> Tools:
        """The tools for one map."""
        blanks = Blanks(template.blanks)
        parts: dict[str, int] = {}
        for line in template.lines:
            if line.number and line.number.split:
                parts[line.field] = max(parts.get(line.field, 0), line.number.part)
        policy = Policy(template.unknown_values == "keep-as-text", bool(template.local_system))
        return cls(catalogue, units, blanks, policy, RecordReader(template.record, blanks), parts)


def reading_of(line: Line, tools: Tools) -> LineReading:
    """The function that reads one line."""
    test = test_of(line.when, tools.blanks) if line.when else None
    if line.named:
        return _guarded(_NamingLine(line, tools).read, test)
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
        run.notes += [words_of(value) for value in tools.blanks.filled(run.fields.get(line.note))]

    return read


def _when_blank(line: Line, finding: str, means: BlankMeans) -> Entry | None:
    presence = _BLANK_PRESENCE.get(means)
    return Entry(finding, presence, instance=line.instance, fields=(line.field,)) if presence else None


class _FindingLine:
    """A line about one finding."""

    def __init__(self, line: Line, tools: Tools) -> None:
        self._line = line
        self._tools = tools
        self._blank = _when_blank(line, line.finding, line.blank_means)
        self._constants = constants(line.qualifiers)
        self._describers: list[tuple[str, Describes]] = [
            (source.field, describer(source, tools.policy)) for source in line.qualifiers if source.field
        ]
        self._details = tuple(line.details())

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
            return boxes.number_box(
                line, definition, tools.units, tools.policy, tools.parts.get(line.field, 1)
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
        name, conditional, described = line.field, line.when is not None, bool(line.qualifiers or line.note)
        exact = {}
        if line.choice and not line.choice.several and not described:
            exact = boxes.lookup(line, line.choice, self._tools.policy).exact

        def read(run: Run) -> None:
            field = run.fields.get(name)
            if conditional:
                run.settled.add(name)
            if field is None:
                # A missing column is not a blank box; forms that omit blanks are not tables.
                if blank and run.record.form != "table":
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
            self._read(run, field, says)

        return read

    def _read(self, run: Run, field: Field, says: Says) -> None:
        before = len(run.issues)
        entry = says(run, self._tools.blanks.filled(field))
        if entry:
            self._put(run, entry, field)
        elif len(run.issues) > before:
            run.settled.update(self._details)

    def _marked(self, run: Run, field: Field, says: Says) -> None:
        """A box that says more than its values: a status, a time, or remarks of its own."""
        line = self._line
        presence = _TAKEN_OUT.get(field.status)
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
            self._read(run, field, says)
        elif self._blank:
            self._put(run, self._blank, field)
        elif field.notes:
            run.notes += field.notes

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
                for name in self._details
                if (field := run.fields.get(name)) and tools.blanks.filled(field)
            ]
            taken_back = bool(filled) and all(field.status == "entered-in-error" for field in filled)
            self._put(run, withdrawn if taken_back else base, filled[0] if filled else None)

        return read

    def _put(self, run: Run, base: Entry, carrier: Field | None) -> None:
        """Adds the entry with its qualifiers, its own time and its remarks."""
        plain = carrier is None or is_plain(carrier)
        if plain and not self._line.qualifiers and not self._line.note:
            run.entries.append(base)
            return
        qualifiers = [*base.qualifiers, *self._constants(base)]
        fields, notes = list(base.fields), list(base.notes)
        for name, describes in self._describers:
            self._describe(run, name, describes, base, qualifiers, fields, notes)
        self._note(run, fields, notes)
        time = ""
        if carrier is not None and not plain:
            time = _own_time(run, carrier, self._tools.record)
            notes += _own_notes(run, carrier)
        run.entries.append(
            Entry(
                base.finding,
                base.presence,
                base.answers,
                base.measure,
                base.text,
                _in_order(qualifiers),
                base.instance,
                base.reason,
                tuple(notes),
                base.withdrawn,
                time,
                tuple(dict.fromkeys(fields)),
                base.said,
            )
        )

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
            notes += _own_notes(run, field)
        fields.append(name)
        qualifiers += describes(run, values)

    def _note(self, run: Run, fields: list[str], notes: list[str]) -> None:
        name = self._line.note
        if name:
            run.settled.add(name)
            if values := self._tools.blanks.filled(run.fields.get(name)):
                notes += [words_of(value) for value in values]
                fields.append(name)


class _NamingLine:
    """A line about a box that names several findings."""

    def __init__(self, line: Line, tools: Tools) -> None:
        if line.named is None:  # pragma: no cover  (the caller asks only for such lines)
            raise ValueError(line)
        self._line = line
        self._tools = tools
        self._named = line.named
        self._table = boxes.lookup(line, line.named, tools.policy)
        self._message = boxes.unknown_text(line.named, kept=tools.policy.keep_unknown)
        findings = [finding for finding, _ in line.gives()]
        self._blank = self._all(findings, line.blank_means)
        self._unlisted = self._all(findings, line.unlisted)

    def _all(self, findings: list[str], means: BlankMeans) -> list[Entry]:
        return [entry for finding in findings if (entry := _when_blank(self._line, finding, means))]

    def read(self, run: Run) -> None:
        """Reads the box."""
        line, name = self._line, self._line.field
        run.settled.add(name)
        field = run.fields.get(name)
        if field is None and run.record.form == "table":
            return
        found = self._found(run, field)
        notes: tuple[str, ...] = ()
        if line.note:
            run.settled.add(line.note)
            notes = tuple(words_of(value) for value in self._tools.blanks.filled(run.fields.get(line.note)))
        if field is not None and not is_plain(field):
            notes += tuple(_own_notes(run, field))
            time = _own_time(run, field, self._tools.record)
            withdrawn = field.status == "entered-in-error"
            found = [replace(entry, time=time, withdrawn=withdrawn) for entry in found]
        if notes and found:
            found[0] = replace(found[0], notes=notes)
        else:
            run.notes += notes
        run.entries += found

    def _found(self, run: Run, field: Field | None) -> list[Entry]:
        if field is not None and field.status in _TAKEN_OUT:
            means: Callable[[str], Entry] = lambda finding: Entry(  # noqa: E731 - one expression, used once
                finding, _TAKEN_OUT[field.status], instance=self._line.instance, fields=(self._line.field,)
            )
            return [means(finding) for finding, _ in self._line.gives()]
        values = self._tools.blanks.filled(field)
        if not values:
            return list(self._blank)
        found: dict[Entry, None] = {}
        for token in boxes.tokens(values, self._named.separator):
            entry = self._table.find(token)
            if isinstance(entry, Entry):
                found[entry] = None
            elif entry is None:
                self._unknown(run, token)
        named = {entry.finding for entry in found}
        return [*found, *(entry for entry in self._unlisted if entry.finding not in named)]

    def _unknown(self, run: Run, token: object) -> None:
        keep = self._tools.policy.keep_unknown
        run.unknown_value("warning" if keep else "error", self._message, self._line.field, token)  # type: ignore[arg-type]
        if keep:
            run.notes.append(f"{self._line.field}: {words_of(token)}")  # type: ignore[arg-type]


def _own_time(run: Run, field: Field, record: RecordReader) -> str:
    """The box's own time where it differs from the examination's."""
    if not field.time.strip():
        return ""
    moment = record.moment(run, field.time, field.name)
    return "" if moment is None or moment == run.moment else moment.start


def _own_notes(run: Run, field: Field) -> list[str]:
    """Remarks of the box, once in the whole examination; method and site travel in words."""
    if field.name in run.noted:
        return []
    run.noted.add(field.name)
    notes = [note for note in field.notes if note.strip()]
    if field.method.strip():
        notes.append(f"Method as sent: {field.method.strip()}")
    if field.site.strip():
        notes.append(f"Body site as sent: {field.site.strip()}")
    if field.performer.strip() and field.performer.strip() != run.record.header.examiner:
        words = (
            "This entry names an examiner of its own, which was not kept; name the examiner "
            "of the examination."
        )
        run.issue("information", "informational", "map-performer-unread", words, field.name)
    return notes


def _in_order(qualifiers: list[Qualifier]) -> tuple[Qualifier, ...]:
    if len(qualifiers) < 2:
        return tuple(qualifiers)
    return tuple(sorted(dict.fromkeys(qualifiers), key=lambda q: (q.axis, q.value, q.text)))
