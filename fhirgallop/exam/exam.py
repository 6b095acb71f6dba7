"""Exam: one examination as the clinician meant it."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

from fhirgallop.exam.entry import Entry
from fhirgallop.exam.moment import Moment

ExamStatus = Literal["final", "preliminary", "amended", "corrected", "entered-in-error"]


@dataclass(frozen=True, slots=True)
class Party:
    """A patient, encounter or examiner: a business identifier, or a FHIR id when `is_fhir_id`."""

    value: str
    system: str = ""
    is_fhir_id: bool = False


@dataclass(frozen=True, slots=True)
class MapVersion:
    """The template map an exam was read by."""

    name: str
    version: str


@dataclass(frozen=True, slots=True)
class Exam:
    """One examination.

    Attributes:
        identifier: the sender's number of it, unique within `identifier_system`; with the patient it makes
            the ids of all resources, so that the same examination sent twice is the same resources.
        time: when it took place.
        entries: what was said, in the order of the map.
        local_system: code system of the local field names and wordings, to be kept as codings; else empty.
    """

    patient: Party
    identifier: str
    identifier_system: str
    time: Moment
    entries: tuple[Entry, ...]
    status: ExamStatus = "final"
    encounter: Party | None = None
    examiner: Party | None = None
    notes: tuple[str, ...] = ()
    map: MapVersion | None = None
    local_system: str = ""
