"""LocalRecord: one examination as the EHR's form sent it, and the values its fields may hold."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from decimal import Decimal
from typing import Literal

from fhirgallop.outcome import Issue

Form = Literal["json", "table", "oru", "questionnaire-response"]
Status = Literal[
    "final", "preliminary", "amended", "corrected", "entered-in-error", "cancelled", "not-asked", ""
]


@dataclass(frozen=True, slots=True)
class Coded:
    """A value with a code of its own (HL7 v2 CWE, FHIR Coding)."""

    code: str
    display: str = ""
    system: str = ""


@dataclass(frozen=True, slots=True)
class Amount:
    """A number that came with a unit or a comparator of its own; `unit` is as written, perhaps empty."""

    value: Decimal
    unit: str = ""
    comparator: str = ""


@dataclass(frozen=True, slots=True)
class Span:
    """A range that came as one value; an open end is None."""

    low: Decimal | None
    high: Decimal | None
    unit: str = ""


Value = str | Decimal | bool | Coded | Amount | Span


@dataclass(frozen=True, slots=True)
class Field:
    """One named entry of a record.

    Attributes:
        name: dotted path (JSON), column header, OBX-3 identifier, or linkId.
        values: as sent and in order; no value at all is an empty tuple (a blank box).
        line: line or row in the source, from 1; 0 when unknown.
        status: what the source says of this single entry (OBX-11); empty when it says nothing.
        time: the entry's own time as written (OBX-14); empty when it has none.
        notes: remarks attached to the entry (NTE, item text), as written.
        method: method as written (OBX-17).
        site: body site as written (OBX-20).
        performer: identifier of who made this entry (OBX-16).
    """

    name: str
    values: tuple[Value, ...]
    line: int = 0
    status: Status = ""
    time: str = ""
    notes: tuple[str, ...] = ()
    method: str = ""
    site: str = ""
    performer: str = ""


@dataclass(frozen=True, slots=True)
class Header:
    """What a self-describing form says of the whole examination; empty where it says nothing."""

    patient: str = ""
    encounter: str = ""
    time: str = ""
    examiner: str = ""
    identifier: str = ""
    status: Status = ""


@dataclass(frozen=True, slots=True)
class LocalRecord:
    """One examination, uninterpreted.

    Attributes:
        form: which intake form it came in.
        fields: by name, in the order of the source.
        header: what the form itself says of patient, time and so on (HL7 v2, QuestionnaireResponse).
        source: file name or address it came from; empty for a bare call.
        line: line or row where the record starts; 0 when unknown.
        issues: what the reader noticed (a segment no reader handles, a repeated header ...).
    """

    form: Form
    fields: Mapping[str, Field]
    header: Header = field(default_factory=Header)
    source: str = ""
    line: int = 0
    issues: tuple[Issue, ...] = ()
