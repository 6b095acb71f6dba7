"""A line of the map about a box that holds a line of text: its findings are read from the words."""

from __future__ import annotations

from dataclasses import replace
from typing import Final

from fhirgallop import phrases
from fhirgallop.exam.entry import Entry
from fhirgallop.exam.presence import Presence
from fhirgallop.intake.record import Field
from fhirgallop.mapping.marks import own_notes, own_time
from fhirgallop.mapping.preparation import TAKEN_OUT, Tools
from fhirgallop.mapping.run import Run, is_plain
from fhirgallop.mapping.template_map import Line, WordsForm
from fhirgallop.mapping.wordings import words_of
from fhirgallop.phrases import ReadFinding, ReadLine

# Findings that may stand more than once in one line, each with its own description.
_SEVERAL: Final = ("murmur",)


class WordsLine:
    """Reads one box of words; what it gives waits in `run.lines` until it is held against the boxes."""

    def __init__(self, line: Line, form: WordsForm, tools: Tools) -> None:
        self._line = line
        self._form = form
        self._filled = tools.blanks.filled
        self._record = tools.record
        self._reader = phrases.reader(form.language)

    def read(self, run: Run) -> None:
        """Reads the box."""
        name = self._line.field
        run.settled.add(name)
        field = run.fields.get(name)
        if field is None:
            return
        if not is_plain(field):
            run.notes += own_notes(run, field)
        if field.status in ("entered-in-error", *TAKEN_OUT):
            words = "The sender took this line of text back; nothing was read from it."
            run.issue("information", "informational", "map-line-withdrawn", words, name)
            return
        for value in self._filled(field):
            self._line_of(run, field, words_of(value))

    def _line_of(self, run: Run, field: Field, words: str) -> None:
        read = self._reader.read(words)
        run.notes.append(words)
        for issue in read.issues:
            run.issue(issue.severity, issue.code, issue.rule, issue.text, self._line.field)
        for part in read.unread:
            text = (
                "Words of this line were not read as findings of today; they travel with the line as a "
                "remark. Check whether they matter."
            )
            run.unread_words(text, self._line.field, read.words(part))
        run.lines += self._entries(read, run, field)

    def _entries(self, read: ReadLine, run: Run, field: Field) -> list[Entry]:
        """One entry a finding; a second murmur of the same kind is an instance of its own."""
        found: list[Entry] = []
        for one in read.findings:
            entry = self._entry(read, one, run, field)
            same = [other for other in found if other.finding == entry.finding]
            if any(_says_the_same(other, entry) for other in same):
                continue
            several = entry.finding.startswith(_SEVERAL) and entry.presence is Presence.PRESENT
            if same and several:
                entry = replace(entry, instance=str(len(same) + 1))
            found.append(entry)
        return found

    def _entry(self, read: ReadLine, one: ReadFinding, run: Run, field: Field) -> Entry:
        entry = one.entry
        return Entry(
            entry.finding,
            entry.presence,
            entry.answers,
            entry.measure,
            qualifiers=entry.qualifiers,
            reason=entry.reason,
            notes=(read.words(one),),
            time="" if is_plain(field) else own_time(run, field, self._record),
            fields=(self._line.field,),
            words=read.words(one),
            preliminary=self._form.preliminary,
        )


def _says_the_same(one: Entry, other: Entry) -> bool:
    return (one.presence, one.answers, one.measure, one.qualifiers) == (
        other.presence, other.answers, other.measure, other.qualifiers,
    )  # fmt: skip
