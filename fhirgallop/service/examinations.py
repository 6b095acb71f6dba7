"""Codes an examination, keeps it, and tells a repetition from a change."""

from __future__ import annotations

import hashlib
from collections.abc import Callable
from dataclasses import dataclass, replace
from datetime import datetime
from typing import Any, Final

from fhirgallop.codes import fhirjson
from fhirgallop.exam.exam import Exam
from fhirgallop.intake.record import LocalRecord
from fhirgallop.mapping.template_map import TemplateMap
from fhirgallop.observations.bundle import instant
from fhirgallop.observations.editions import Edition
from fhirgallop.observations.identity import Identities
from fhirgallop.outcome import Issue, has_errors, ordered
from fhirgallop.pipeline import Result, finish, understand
from fhirgallop.storage.keys import patient_key
from fhirgallop.storage.submissions import Submission, Submissions

_TRIES: Final = 5
_SEEN_BEFORE: Final = Issue(
    "warning",
    "conflict",
    "exam-earlier-content-again",
    "This content was received before and has been changed since; it takes the place of the newer one now. "
    "If an old message was only repeated, send the newer one again.",
)


class BusyError(Exception):
    """The same examination is being changed by too many requests at once."""


@dataclass(frozen=True, slots=True)
class Coded:
    """The result of one record, with the Bundle as it was kept."""

    result: Result
    bundle: bytes | None


class Examinations:
    """Codes and keeps examinations.

    The same examination sent twice is answered with the very same Bundle; a changed one is given its earlier
    Bundle, so that what changed is amended and what is gone is entered in error.
    """

    def __init__(self, store: Submissions, clock: Callable[[], datetime]) -> None:
        self._store = store
        self._clock = clock

    def code(self, record: LocalRecord, template: TemplateMap, edition: Edition, *, snomed: bool) -> Coded:
        """One record through the pipeline and into the store.

        Raises:
            BusyError: other requests kept changing the same examination.
            StorageError: the database failed; nothing of this record was kept.
        """
        now = self._clock()
        understood = understand(record, template, now)
        if understood.exam is None or has_errors(understood.issues):
            return Coded(understood, None)
        exam = Identities(understood.exam).of("examination")
        meant = _fingerprint(understood.exam)
        for _ in range(_TRIES):
            before = self._store.latest(exam, edition, snomed=snomed)
            if before and before.record_hash == meant:
                return Coded(understood, before.bundle)
            earlier: dict[str, Any] | None = fhirjson.read(before.bundle)[0] if before else None
            result = finish(
                understood, record.form, recorded=now, edition=edition, snomed=snomed, earlier=earlier
            )
            if result.bundle is None:
                return Coded(result, None)
            if before and self._store.has(exam, edition, meant, snomed=snomed):
                result = replace(result, issues=tuple(ordered([*result.issues, _SEEN_BEFORE])))
            text = fhirjson.write(result.bundle)
            version = before.version + 1 if before else 1
            row = Submission(
                exam, edition, snomed, version, template.name, template.version, meant,
                patient_key(understood.exam.patient.system, understood.exam.patient.value),
                instant(now), text,
            )  # fmt: skip
            if self._store.add(row):
                return Coded(result, text)
        raise BusyError


def _fingerprint(exam: Exam) -> str:
    """The same for the same meaning, whichever form it came in."""
    return hashlib.sha256(repr(exam).encode("utf-8", "replace")).hexdigest()
