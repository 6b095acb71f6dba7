"""TemplateMap: an informatician's rules from a form's fields to findings, as frozen values.

The text form (YAML) is described by `grammar` and read by `reading`; here is what it means once read.
Every `line` is the line of the map's text that a thing was read from, for messages.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from typing import Literal

from fhirgallop.exam.exam import ExamStatus, MapVersion
from fhirgallop.exam.moment import Moment
from fhirgallop.exam.presence import Presence

BlankMeans = Literal["not-recorded", "absent", "not-examined"]
UnknownValues = Literal["refuse", "keep-as-text"]


@dataclass(frozen=True, slots=True)
class FieldIs:
    """True when the field holds one of these wordings."""

    field: str
    words: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class FieldBlank:
    """True when the field is blank (or, with `blank` false, filled)."""

    field: str
    blank: bool


@dataclass(frozen=True, slots=True)
class AllOf:
    """True when every part is."""

    parts: tuple[Condition, ...]


@dataclass(frozen=True, slots=True)
class AnyOf:
    """True when at least one part is."""

    parts: tuple[Condition, ...]


@dataclass(frozen=True, slots=True)
class Not:
    """True when the part is not."""

    part: Condition


Condition = FieldIs | FieldBlank | AllOf | AnyOf | Not


@dataclass(frozen=True, slots=True)
class Meaning:
    """What one wording of a choice list means.

    Attributes:
        presence: what it says; None when it says nothing (`not-recorded`).
        answer: value id, where the finding is a choice or the wording is a qualifier's.
        qualifiers: (axis, value id) pairs that the wording says besides.
        reason: why it was not, or could not be, examined.
        finding: the finding it names, in a box that names several.
    """

    presence: Presence | None
    answer: str = ""
    qualifiers: tuple[tuple[str, str], ...] = ()
    reason: str = ""
    finding: str = ""
    line: int = 0


@dataclass(frozen=True, slots=True)
class ChoiceList:
    """Wordings and their meanings; with `several`, one box may hold many, split at `separator`."""

    meanings: Mapping[str, Meaning]
    several: bool = False
    separator: str = ""
    line: int = 0


@dataclass(frozen=True, slots=True)
class NumberForm:
    """How a number is written.

    Attributes:
        unit: UCUM code where the value brings none of its own; empty when each value must bring one.
        split: sign between several numbers in one box (`/` in 152/84); empty when there is one number.
        part: which of these numbers, from 1.
        decimal: decimal sign of numbers written as text.
    """

    unit: str
    split: str = ""
    part: int = 1
    decimal: str = "."
    line: int = 0


@dataclass(frozen=True, slots=True)
class QualifierSource:
    """Where a qualifier of a finding comes from: exactly one of constant, choice, grade, text."""

    axis: str
    field: str = ""
    constant: str = ""
    choice: ChoiceList | None = None
    grade_of: int = 0
    text: bool = False
    line: int = 0


@dataclass(frozen=True, slots=True)
class WordsForm:
    """How a line of text is read: language of its wordings, and whether what is read stays preliminary."""

    language: str
    preliminary: bool = False


@dataclass(frozen=True, slots=True)
class Line:
    """One line of the map: what one box, or one constant, says of one finding.

    Attributes:
        finding: catalogue id; empty for a box that names several findings and for a remark.
        field: the box; empty where `presence` is a constant.
        presence: the constant.
        choice, number, text: how the box is read; `choice` beside `number` or `text` holds the words that
            may stand there instead.
        named: the findings that one box may name (`choice` meanings with `finding`), and `unlisted` what a
            filled box says of those it does not name.
        blank_means: what a blank box means here, worked out from line, section and template.
        words: the box holds a line of text; its findings are read from the words.
        note: field whose words travel with the finding, or, without a finding, with the examination.
        time: where the moment stands to which the box refers, if it is not the examination's.
    """

    line: int
    finding: str = ""
    instance: str = ""
    section: str = ""
    field: str = ""
    presence: Presence | None = None
    choice: ChoiceList | None = None
    number: NumberForm | None = None
    text: bool = False
    named: ChoiceList | None = None
    unlisted: BlankMeans = "not-recorded"
    qualifiers: tuple[QualifierSource, ...] = ()
    note: str = ""
    when: Condition | None = None
    blank_means: BlankMeans = "not-recorded"
    time: TimeSource | None = None
    words: WordsForm | None = None

    def describing(self) -> Iterator[str]:
        """Fields that describe the finding but do not say whether it is there."""
        yield from (source.field for source in self.qualifiers if source.field)
        if self.note:
            yield self.note

    def details(self) -> Iterator[str]:
        """Fields that are read only when the finding is there: they describe it, or say when it was."""
        yield from self.describing()
        if self.time:
            yield from self.time.fields

    def reads(self) -> Iterator[str]:
        """Every field this line looks at."""
        if self.field:
            yield self.field
        yield from self.details()
        if self.when:
            yield from condition_fields(self.when)

    def gives(self) -> Iterator[tuple[str, str]]:
        """(finding, instance) of every entry the line can make."""
        if self.finding:
            yield self.finding, self.instance
        if self.named:
            for finding in dict.fromkeys(m.finding for m in self.named.meanings.values() if m.finding):
                yield finding, self.instance


def condition_fields(condition: Condition) -> Iterator[str]:
    """Every field a condition looks at."""
    match condition:
        case FieldIs(field=name) | FieldBlank(field=name):
            yield name
        case AllOf(parts) | AnyOf(parts):
            for part in parts:
                yield from condition_fields(part)
        case Not(part):
            yield from condition_fields(part)


@dataclass(frozen=True, slots=True)
class PartySource:
    """Where patient, encounter or examiner stand; without a field, in the form's own header."""

    field: str = ""
    system: str = ""
    is_fhir_id: bool = False
    line: int = 0


@dataclass(frozen=True, slots=True)
class IdentifierSource:
    """Where the examination's number stands; several fields are joined by hyphens."""

    fields: tuple[str, ...] = ()
    system: str = ""
    line: int = 0


@dataclass(frozen=True, slots=True)
class TimeSource:
    """Where the time of an examination, or of a single box, stands.

    Attributes:
        fields: joined by a blank; none where the form's header or `constant` says it.
        zone: `Z`, an offset, or a name such as Europe/Vienna, for times of day written without one.
        format: written form, such as `DD.MM.YYYY hh:mm`; empty for ISO 8601.
        periods: wording of the field -> the span of time it stands for.
        constant: the same for all records.
    """

    fields: tuple[str, ...] = ()
    zone: str = ""
    format: str = ""
    periods: Mapping[str, Moment] = field(default_factory=dict)
    constant: Moment | None = None
    line: int = 0


@dataclass(frozen=True, slots=True)
class StatusSource:
    """Where the examination's status stands, and what its wordings mean."""

    field: str
    choice: Mapping[str, ExamStatus]
    line: int = 0


@dataclass(frozen=True, slots=True)
class RecordPart:
    """Where a record says whose examination it is, which one, and when."""

    patient: PartySource
    identifier: IdentifierSource
    time: TimeSource
    encounter: PartySource | None = None
    examiner: PartySource | None = None
    status: StatusSource | None = None

    def fields(self) -> Iterator[str]:
        """Every field named here."""
        for party in (self.patient, self.encounter, self.examiner, self.status):
            if party and party.field:
                yield party.field
        yield from self.identifier.fields
        yield from self.time.fields


@dataclass(frozen=True, slots=True)
class Ignored:
    """A field, or all fields of a pattern with `*`, left out for a stated reason."""

    pattern: str
    reason: str
    line: int = 0

    def covers(self, name: str) -> bool:
        """True when `name` is left out by this entry; `*` stands for any letters, none included."""
        first, *rest = self.pattern.split("*")
        if not rest:
            return name == first
        *middle, last = rest
        if not name.startswith(first) or len(name) < len(first) + len(last) or not name.endswith(last):
            return False
        at, end = len(first), len(name) - len(last)
        for piece in middle:
            at = name.find(piece, at, end)
            if at < 0:
                return False
            at += len(piece)
        return True


@dataclass(frozen=True, eq=False)
class TemplateMap:
    """One version of one form's map; two maps are the same only when they are the same object."""

    name: str
    version: str
    title: str
    record: RecordPart
    lines: tuple[Line, ...]
    ignored: tuple[Ignored, ...] = ()
    blanks: tuple[str, ...] = ()
    unknown_values: UnknownValues = "refuse"
    local_system: str = ""

    @property
    def stamp(self) -> MapVersion:
        """Name and version, as an Exam carries them."""
        return MapVersion(self.name, self.version)

    def reads(self) -> frozenset[str]:
        """Every field that a line or the record part looks at."""
        return frozenset(self.record.fields()).union(*(line.reads() for line in self.lines))
