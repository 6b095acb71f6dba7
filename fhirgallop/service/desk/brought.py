"""What was brought in: sample records and a data dictionary, seen field by field."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from typing import Final

from fhirgallop.codes import fhirjson
from fhirgallop.intake.detect import open_records
from fhirgallop.intake.limits import Limits
from fhirgallop.intake.record import LocalRecord
from fhirgallop.mapping.wordings import words_of
from fhirgallop.outcome import Issue, ordered
from fhirgallop.service.desk.dictionary import Described
from fhirgallop.storage.drafts import Sample

MOST_RECORDS: Final = 2_000
MOST_FIELDS: Final = 5_000
_MOST_VALUES: Final = 200  # different values of a field that are told apart
_LONGEST: Final = 200
# on the safe side of what a page can show
LIMITS: Final = Limits(list_bytes=8 * 1024 * 1024, workbook_bytes=8 * 1024 * 1024, fields=MOST_FIELDS)


@dataclass(slots=True)
class FieldSeen:
    """One field over all sample records, with what a data dictionary says of it.

    Attributes:
        name: as records have it.
        label: what people read beside it; empty where nobody told.
        section: the heading it stands under, or the first part of its path.
        unit: its unit, where a data dictionary tells it.
        filled, blank: records in which it is filled, or there and blank.
        values: what it held, each with how often; at most 200 different ones.
        labels: what a value stands for, where a data dictionary tells it.
        more: it held still other values.
    """

    name: str
    label: str = ""
    section: str = ""
    unit: str = ""
    filled: int = 0
    blank: int = 0
    values: Counter[str] = field(default_factory=Counter)
    labels: dict[str, str] = field(default_factory=dict)
    more: bool = False

    @property
    def is_numeric(self) -> bool:
        """Whether what it held are mostly numbers."""
        seen = list(self.values)
        return bool(seen) and sum(value.replace(",", ".").replace(".", "", 1).isdigit() for value in seen) > (
            0.7 * len(seen)
        )

    @property
    def wordings(self) -> list[str]:
        """Its values as a person would word them, for suggestions."""
        return [self.labels.get(value, value) for value in self.values]


@dataclass(frozen=True, slots=True)
class Brought:
    """Everything a draft knows of the form.

    Attributes:
        records: the sample records, at most 2,000.
        further: records beyond these, which were not looked at.
        fields: by name, in the order in which they were met.
        issues: what was noticed while reading.
    """

    records: tuple[LocalRecord, ...]
    further: int
    fields: dict[str, FieldSeen]
    issues: tuple[Issue, ...]


def gather(samples: Iterable[Sample], described: Sequence[Described]) -> Brought:
    """Reads the sample records and lays the data dictionary over them."""
    fields: dict[str, FieldSeen] = {}
    issues: list[Issue] = []
    for row in described:
        seen = fields.setdefault(row.name, FieldSeen(row.name))
        seen.label, seen.section, seen.unit = row.label, row.section, row.unit
        for value, label in row.values:
            seen.values.setdefault(value, 0)
            if label:
                seen.labels[value] = label
    records: list[LocalRecord] = []
    further = 0
    for sample in samples:
        for read in open_records(sample.content, content_type=sample.media_type, limits=LIMITS):
            issues += read.issues
            if not isinstance(read, LocalRecord):
                continue
            if len(records) == MOST_RECORDS:
                further += 1
                continue
            records.append(read)
            _count(fields, read)
    return Brought(tuple(records), further, fields, tuple(ordered(issues)))


def _count(fields: dict[str, FieldSeen], record: LocalRecord) -> None:
    for name, held in record.fields.items():
        seen = fields.get(name)
        if seen is None:
            if len(fields) >= MOST_FIELDS:
                continue
            seen = fields[name] = FieldSeen(name, section=name.rpartition(".")[0].partition(".")[0])
        words = [text for value in held.values if (text := words_of(value).strip())]
        if not words:
            seen.blank += 1
            continue
        seen.filled += 1
        for text in words:
            if text[:_LONGEST] in seen.values or len(seen.values) < _MOST_VALUES:
                seen.values[text[:_LONGEST]] += 1
            else:
                seen.more = True


def written(described: Sequence[Described]) -> bytes:
    """A data dictionary as it is kept with a draft."""
    return fhirjson.write(
        [
            [row.name, row.label, row.section, row.unit, [list(pair) for pair in row.values]]
            for row in described
        ]
    )


def read_written(kept: bytes) -> list[Described]:
    """A data dictionary that `written` wrote."""
    rows = fhirjson.read(kept)[0] if kept else []
    return [
        Described(name, label, section, unit, tuple((value, words) for value, words in values))
        for name, label, section, unit, values in rows
    ]
