"""A line about one box that names several findings."""

from __future__ import annotations

from dataclasses import replace

from fhirgallop.exam.entry import Entry
from fhirgallop.intake.record import Field, Value
from fhirgallop.mapping import boxes
from fhirgallop.mapping.marks import own_notes, own_time
from fhirgallop.mapping.preparation import TAKEN_OUT, Tools, when_blank
from fhirgallop.mapping.run import Run, is_plain
from fhirgallop.mapping.template_map import BlankMeans, Line
from fhirgallop.mapping.wordings import words_of


class NamingLine:
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
        self._time = tools.line_time(line)
        self._unlisted = self._all(findings, line.unlisted)

    def _all(self, findings: list[str], means: BlankMeans) -> list[Entry]:
        return [entry for finding in findings if (entry := when_blank(self._line, finding, means))]

    def read(self, run: Run) -> None:
        """Reads the box."""
        line, name = self._line, self._line.field
        run.settled.add(name)
        field = run.fields.get(name)
        if field is None:
            found = list(self._blank) if self._blank and run.blank_for_missing(name) else []
        else:
            found = self._found(run, field)
        notes: tuple[str, ...] = ()
        if line.note:
            run.settled.add(line.note)
            notes = tuple(words_of(value) for value in self._tools.blanks.filled(run.fields.get(line.note)))
        time = self._time.read(run) if self._time and found else ""
        withdrawn = False
        if field is not None and not is_plain(field):
            notes += tuple(own_notes(run, field))
            time = own_time(run, field, self._tools.record, time)
            withdrawn = field.status == "entered-in-error"
        if time or withdrawn:
            found = [replace(entry, time=time, withdrawn=withdrawn) for entry in found]
        if notes and found:
            found[0] = replace(found[0], notes=notes)
        else:
            run.notes += notes
        run.entries += found

    def _found(self, run: Run, field: Field) -> list[Entry]:
        if presence := TAKEN_OUT.get(field.status):
            fields = (self._line.field,)
            return [
                Entry(finding, presence, instance=instance, fields=fields)
                for finding, instance in self._line.gives()
            ]
        values = self._tools.blanks.filled(field)
        if not values:
            return list(self._blank)
        found: dict[Entry, None] = {}
        unknown = False
        for token in boxes.tokens(values, self._named.separator):
            entry = self._table.find(token)
            if isinstance(entry, Entry):
                found[entry] = None
            elif entry is None:
                unknown = True
                self._unknown(run, token)
        if unknown:
            # The unknown wording may be any of those that were not named.
            return list(found)
        named = {entry.finding for entry in found}
        return [*found, *(entry for entry in self._unlisted if entry.finding not in named)]

    def _unknown(self, run: Run, token: Value) -> None:
        keep = self._tools.policy.keep_unknown
        run.unknown_value("warning" if keep else "error", self._message, self._line.field, token)
        if keep:
            run.notes.append(f"{self._line.field}: {words_of(token)}")
