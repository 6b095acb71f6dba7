"""Examinations as people look for them: the latest, one patient's, one number's, and the versions of one."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

from sqlalchemy import ColumnElement, Engine, and_, exists, select

from fhirgallop.storage.submissions import Submission, told
from fhirgallop.storage.tables import submissions


@dataclass(frozen=True, slots=True)
class KeptVersion:
    """One version of an examination, without its Bundle; see Submission."""

    id: int
    version: int
    edition: str
    snomed: bool
    map_name: str
    map_version: str
    received: str


_VERSION: Final = [submissions.c[name] for name in KeptVersion.__dataclass_fields__]
_WHOLE: Final = [submissions.c[name] for name in Submission.__dataclass_fields__]


class ExamSearch:
    """Reads; every method raises StorageError when the database failed."""

    def __init__(self, engine: Engine) -> None:
        self._engine = engine

    def newest(
        self, *, limit: int, before: int = 0, patient: str = "", number: str = ""
    ) -> Sequence[Submission]:
        """The last version of each examination, the latest received first.

        Args:
            limit: how many at most.
            before: only rows with a smaller id; 0 for the first page.
            patient: only those of the patient with this digest (storage.keys.patient_key).
            number: only those with this digest of their number (storage.keys.number_key).
        """
        later = submissions.alias("later")
        where: list[ColumnElement[bool]] = [
            ~exists().where(and_(later.c.exam == submissions.c.exam, later.c.id > submissions.c.id))
        ]
        if before:
            where.append(submissions.c.id < before)
        if patient:
            where.append(submissions.c.patient == patient)
        if number:
            where.append(submissions.c.number == number)
        query = select(*_WHOLE).where(*where).order_by(submissions.c.id.desc()).limit(limit)
        with told(), self._engine.connect() as connection:
            return [Submission(*row) for row in connection.execute(query)]

    def versions(self, exam: str) -> Sequence[KeptVersion]:
        """Every version of an examination, in every way of writing it, the latest first."""
        query = select(*_VERSION).where(submissions.c.exam == exam).order_by(submissions.c.id.desc())
        with told(), self._engine.connect() as connection:
            return [KeptVersion(*row) for row in connection.execute(query)]

    def version(self, exam: str, row: int) -> Submission | None:
        """One version by its row; None where the examination has none such."""
        query = select(*_WHOLE).where(submissions.c.id == row, submissions.c.exam == exam)
        with told(), self._engine.connect() as connection:
            found = connection.execute(query).one_or_none()
        return Submission(*found) if found else None
