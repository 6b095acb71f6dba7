"""Finds examinations for a person: by the patient, by the number of the examination, or the latest."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass
from typing import Final

from fhirgallop.mapping.template_map import TemplateMap
from fhirgallop.service.views.examination import Head, read_head
from fhirgallop.storage.exam_search import ExamSearch
from fhirgallop.storage.keys import number_key, patient_key
from fhirgallop.storage.submissions import Submission

AT_ONCE: Final = 25


@dataclass(frozen=True, slots=True)
class Listed:
    """One examination of the list; `patient` is the digest, for the audit trail."""

    id: str
    head: Head
    version: int
    received: str
    map: str
    patient: str


@dataclass(frozen=True, slots=True)
class Page:
    """A part of the list, and where the next one begins (0: there is none)."""

    listed: tuple[Listed, ...]
    before: int


def look_up(
    search: ExamSearch, templates: Iterable[TemplateMap], *, patient: str, number: str, before: int
) -> Page:
    """A page of the examinations that fit, the latest received first.

    Args:
        search: where they are kept.
        templates: the maps in use: what is typed without its system is looked for under theirs.
        patient: `system|value`, or the value alone; empty for all patients.
        number: the sender's number of the examination, likewise; empty for all.
        before: row from which the list goes on; 0 for its beginning.

    Raises:
        StorageError: the database failed.
    """
    known = list(templates)
    whose = list(_patients(patient, known)) if patient else [""]
    which = list(_numbers(number, known)) if number else [""]
    found: dict[str, Submission] = {}
    for one in whose:
        for other in which:
            rows = search.newest(limit=AT_ONCE + 1, before=before, patient=one, number=other)
            found |= {row.exam: row for row in rows}
    rows = sorted(found.values(), key=lambda row: -row.id)
    shown = rows[:AT_ONCE]
    return Page(tuple(map(_listed, shown)), shown[-1].id if len(rows) > AT_ONCE else 0)


def _patients(typed: str, templates: Sequence[TemplateMap]) -> Iterator[str]:
    system, bar, value = typed.partition("|")
    if bar:
        yield patient_key(system, value)
        return
    yield from (
        patient_key(one, typed) for one in dict.fromkeys(["", *(t.record.patient.system for t in templates)])
    )


def _numbers(typed: str, templates: Sequence[TemplateMap]) -> Iterator[str]:
    system, bar, value = typed.partition("|")
    if bar:
        yield number_key(system, value)
        return
    for one in dict.fromkeys(t.record.identifier.system or t.name for t in templates):
        yield number_key(one, typed)


def _listed(row: Submission) -> Listed:
    return Listed(
        row.exam.removeprefix("urn:uuid:"),
        read_head(row.bundle),
        row.version,
        row.received,
        f"{row.map_name} {row.map_version}",
        row.patient,
    )
