"""Codes an examination, keeps it with all that goes with it, and tells a repetition from a change."""

from __future__ import annotations

import hashlib
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from datetime import datetime
from functools import partial
from typing import Any, Final

from sqlalchemy import Connection

from fhirgallop.codes import fhirjson
from fhirgallop.exam.exam import Exam
from fhirgallop.intake.record import LocalRecord
from fhirgallop.mapping.template_map import TemplateMap
from fhirgallop.observations.bundle import instant
from fhirgallop.observations.editions import Edition
from fhirgallop.observations.identity import Identities
from fhirgallop.outcome import Issue, has_errors, ordered
from fhirgallop.pipeline import Result, finish, understand
from fhirgallop.service.audit_event import Action
from fhirgallop.service.fhir.coded import coded
from fhirgallop.storage import outbox, resources
from fhirgallop.storage.keys import number_key, patient_key
from fhirgallop.storage.submissions import MANY_OTHERS, Also, Seen, Submission, Submissions

_TRIES: Final = 5
_SEEN_BEFORE: Final = Issue(
    "warning",
    "conflict",
    "exam-earlier-content-again",
    "This content was received before and has been changed since; it takes the place of the newer one now. "
    "If an old message was only repeated, send the newer one again.",
)
_OTHER_PATIENT: Final = Issue(
    "warning",
    "conflict",
    "exam-number-other-patient",
    "An examination of this number stands under another patient, and stays as it is. If the patient was "
    "corrected, send the earlier one again, under its own patient, as entered in error.",
)
_CHANGED_ALONE: Final = Issue(
    "warning",
    "conflict",
    "exam-replaces-other-change",
    "Something of this examination was changed here over FHIR since it was sent, and what is sent now takes "
    "its place. Look at the histories of its resources; enter the change in the record too if it is to stay.",
)


class BusyError(Exception):
    """The same examination is being changed by too many requests at once."""


@dataclass(frozen=True, slots=True)
class Wish:
    """How an examination is to be coded."""

    template: TemplateMap
    edition: Edition
    snomed: bool


@dataclass(frozen=True, slots=True)
class Coded:
    """The result of one record, with the Bundle as it is kept.

    Attributes:
        result: what the pipeline gave.
        bundle: the Bundle's bytes; None when the record was refused.
        patient: digest of the patient's identifier; empty when it was not understood whose it is.
        at: the moment of coding, in milliseconds since 1970 (UTC).
        identity: `urn:uuid:...` of the examination; empty like the patient.
        version: of the examination, as it is kept; 0 when nothing is.
        repeated: True when this content is what is kept already.
    """

    result: Result
    bundle: bytes | None
    patient: str = ""
    at: int = 0
    identity: str = ""
    version: int = 0
    repeated: bool = False


def done_to(coded: Coded) -> tuple[Action, str]:
    """What a result did to the patient's data, for the audit trail: action and FHIR interaction."""
    if coded.repeated:
        return "R", "read"
    return ("U", "update") if coded.version > 1 else ("C", "create")


# What else is to be kept in the transaction of a result; called before each try to keep it.
Along = Callable[[Coded], Sequence[Also]]


def nothing(_coded: Coded) -> Sequence[Also]:
    """Nothing else is to be kept."""
    return ()


class Examinations:
    """Codes and keeps examinations.

    The same examination sent twice is answered with the very same Bundle; a changed one is given its earlier
    Bundle, so that what changed is amended and what is gone is entered in error. The examination's version,
    its resources, its delivery and whatever a caller sends along are kept in one transaction.
    """

    def __init__(
        self,
        store: Submissions,
        clock: Callable[[], datetime],
        *,
        delivered: tuple[Edition, bool] | None = None,
    ) -> None:
        """`delivered` is the edition, and whether with SNOMED CT, that the record system gets; None: none."""
        self._store = store
        self._clock = clock
        self._delivered = delivered

    def code(self, record: LocalRecord, wish: Wish, along: Along = nothing) -> Coded:
        """One record through the pipeline and into the store.

        Raises:
            BusyError: other requests kept changing the same examination.
            StorageError: the database failed; nothing of this record was kept.
        """
        now = self._clock()
        at = int(now.timestamp() * 1000)
        understood = understand(record, wish.template, now)
        exam = understood.exam
        patient = patient_key(exam.patient.system, exam.patient.value) if exam else ""
        if exam is None or has_errors(understood.issues):
            return self._beside(0, Coded(understood, None, patient, at), along)
        number = number_key(exam.identifier_system or wish.template.name, exam.identifier)
        identity, meant = Identities(exam).of("examination"), _fingerprint(exam)
        for attempt in range(_TRIES):
            seen = self._store.seen(identity, number, patient)
            result = understood
            if exam.status != "entered-in-error" and self._stands_elsewhere(seen, patient):
                result = _with(result, _OTHER_PATIENT)
            hashes = [one.record_hash for one in seen if _same(one, identity, wish)]
            before = self._store.latest(identity, wish.edition, snomed=wish.snomed) if hashes else None
            if before and before.record_hash == meant:
                again = Coded(result, before.bundle, patient, at, identity, before.version, repeated=True)
                return self._beside(before.id, again, along)
            result = self._finished(result, record.form, wish, now, before)
            if (bundle := result.bundle) is None:
                return self._beside(0, Coded(result, None, patient, at, identity), along)
            if meant in hashes:
                result = _with(result, _SEEN_BEFORE)
            written = coded(bundle, wish.edition)
            if before and self._store.ask(partial(resources.changed_alone, versions=written.versions)):
                result = _with(result, _CHANGED_ALONE)
            row = Submission(
                identity, wish.edition, wish.snomed, before.version + 1 if before else 1,
                wish.template.name, wish.template.version, meant, patient, instant(now), written.text, number,
            )  # fmt: skip
            done = Coded(result, written.text, patient, at, identity, row.version)
            kept = _resources(written.versions, at, fresh=not (before or attempt))
            if self._store.add(row, kept, *self._deliveries(row, wish, at), *along(done)):
                return done
        raise BusyError

    @staticmethod
    def _finished(
        understood: Result, form: str, wish: Wish, now: datetime, before: Submission | None
    ) -> Result:
        earlier: dict[str, Any] | None = fhirjson.read(before.bundle)[0] if before else None
        return finish(
            understood, form, recorded=now, edition=wish.edition, snomed=wish.snomed, earlier=earlier
        )

    def _beside(self, row: int, done: Coded, along: Along) -> Coded:
        """Keeps what goes along with a result that makes no new version."""
        for _ in range(_TRIES):
            also = along(done)
            if not also or self._store.beside(row, *also):
                return done
        raise BusyError

    def _deliveries(self, row: Submission, wish: Wish, at: int) -> Sequence[Also]:
        if self._delivered != (wish.edition, wish.snomed):
            return ()

        def send(connection: Connection, submission: int) -> None:
            outbox.enqueue(
                connection, destination=outbox.RECORD_SYSTEM, submission=submission, exam=row.exam,
                patient=row.patient, at=at,
            )  # fmt: skip

        return (send,)

    def _stands_elsewhere(self, seen: Sequence[Seen], patient: str) -> bool:
        """Whether an examination of the same number stands, not taken back, under another patient."""
        others = [one for one in seen if one.patient != patient]
        newest = {one.exam: one.id for one in others}
        # of very many not all were looked at, and one of them stands
        return len(others) == MANY_OTHERS or any(_stands(self._store.bundle(row)) for row in newest.values())


def _same(one: Seen, identity: str, wish: Wish) -> bool:
    return (one.exam, one.edition, one.snomed) == (identity, wish.edition, wish.snomed)


def _with(result: Result, issue: Issue) -> Result:
    return replace(result, issues=tuple(ordered([*result.issues, issue])))


def _resources(versions: Sequence[resources.NewVersion], at: int, *, fresh: bool) -> Also:
    def keep(connection: Connection, submission: int) -> None:
        resources.add_versions(connection, versions, at=at, submission=submission, fresh=fresh)

    return keep


def _stands(bundle: bytes | None) -> bool:
    if bundle is None:  # deleted since
        return False
    entries = fhirjson.read(bundle)[0]["entry"]
    statuses = {entry["resource"].get("status", "entered-in-error") for entry in entries}
    return statuses != {"entered-in-error"}


def _fingerprint(exam: Exam) -> str:
    """The same for the same meaning, whichever form it came in."""
    return hashlib.sha256(repr(exam).encode("utf-8", "replace")).hexdigest()
