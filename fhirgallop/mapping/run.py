"""Run: one record being read, with everything found so far."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass

from fhirgallop.exam.entry import Entry
from fhirgallop.exam.moment import Moment
from fhirgallop.intake.record import Field, LocalRecord, Value
from fhirgallop.mapping.wordings import words_of
from fhirgallop.outcome import Issue, Severity


@dataclass(frozen=True, slots=True)
class UnknownValue:
    """A value that no line of the map knows; for the sender's own eyes, never for a log."""

    field: str
    value: str


class Run:
    """One record being read by one map."""

    __slots__ = (
        "entries",
        "fields",
        "issues",
        "lines",
        "moment",
        "noted",
        "notes",
        "record",
        "settled",
        "strangers",
        "times",
        "unknown",
    )

    def __init__(self, record: LocalRecord) -> None:
        self.record = record
        self.fields: Mapping[str, Field] = record.fields
        self.entries: list[Entry] = []
        self.issues: list[Issue] = []
        self.unknown: list[UnknownValue] = []
        self.notes: list[str] = []
        # Entries read from lines of text, until they have been held against the boxes.
        self.lines: list[Entry] = []
        self.moment: Moment | None = None
        # Whether fields that the map does not know are filled in: a missing box may be one of them.
        self.strangers = False
        # Fields whose content has gone into an entry or an issue, and fields whose own remarks have.
        self.settled: set[str] = set()
        self.noted: set[str] = set()
        # Times that lines name for their boxes, by what reads them.
        self.times: dict[tuple[str, ...], str] = {}

    def issue(self, severity: Severity, code: str, rule: str, text: str, name: str) -> None:
        """Notes an issue about the field `name`."""
        record, field = self.record, self.fields.get(name)
        line = (field.line if field else 0) or record.line
        self.issues.append(
            Issue(severity, code, rule, text, field=name[:200], source=record.source, line=line)
        )

    def blank_for_missing(self, name: str) -> bool:
        """Whether a box that is not in the record may count as an empty one.

        Forms that leave blanks out are not tables; and beside filled fields that nobody reads, the box may be
        there under another name, so that nothing is said of it.
        """
        if self.record.form == "table":
            return False
        if self.strangers:
            words = (
                "The record lacks this field and holds others that no line reads; one of them may be it, so "
                "blank-means was not applied and nothing is said. Name it in the map, or ignore the others."
            )
            self.issue("warning", "incomplete", "map-blank-not-applied", words, name)
        return not self.strangers

    def unknown_value(self, severity: Severity, text: str, name: str, value: Value) -> None:
        """Notes a value that no line knows."""
        self.issue(severity, "code-invalid", "map-value-unknown", text, name)
        self.unknown.append(UnknownValue(name, words_of(value)))

    def unread_words(self, text: str, name: str, words: str) -> None:
        """Notes words of a line of text from which nothing was read."""
        self.issue("warning", "incomplete", "map-words-unread", text, name)
        self.unknown.append(UnknownValue(name, words))


LineReading = Callable[[Run], None]
Test = Callable[[Run], bool]


def is_plain(field: Field) -> bool:
    """True when a field says nothing but its values."""
    return field.status in ("", "final") and not (
        field.time or field.notes or field.method or field.site or field.performer
    )
