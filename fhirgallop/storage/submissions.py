"""Examinations that were accepted, each version of each, and the Bundle each gave."""

from __future__ import annotations

from dataclasses import dataclass

from sqlalchemy import Connection, Engine, insert, select
from sqlalchemy.exc import IntegrityError

from fhirgallop.storage.tables import submissions


@dataclass(frozen=True, slots=True)
class Submission:
    """One accepted version of an examination.

    Attributes:
        exam: identity of the examination (`urn:uuid:...`).
        version: from 1.
        map_name: template map it was read by.
        map_version: its version.
        edition: FHIR edition of the Bundle.
        record_hash: SHA-256 of what the sender meant, to tell a repetition from a change.
        received: FHIR instant.
        bundle: the Bundle's bytes as answered.
    """

    exam: str
    version: int
    map_name: str
    map_version: str
    edition: str
    record_hash: str
    received: str
    bundle: bytes


class Submissions:
    """Reads and writes submissions; every write is one transaction."""

    def __init__(self, engine: Engine) -> None:
        self._engine = engine

    def latest(self, exam: str) -> Submission | None:
        """The newest version of an examination."""
        with self._engine.connect() as connection:
            return _latest(connection, exam)

    def add(self, submission: Submission) -> bool:
        """Stores one version; False when another request stored that version first."""
        values = {name: getattr(submission, name) for name in submission.__dataclass_fields__}
        try:
            with self._engine.begin() as connection:
                connection.execute(insert(submissions).values(**values))
        except IntegrityError:
            return False
        return True


def _latest(connection: Connection, exam: str) -> Submission | None:
    wanted = [submissions.c[name] for name in Submission.__dataclass_fields__]
    query = select(*wanted).where(submissions.c.exam == exam).order_by(submissions.c.version.desc()).limit(1)
    row = connection.execute(query).one_or_none()
    return Submission(**row._mapping) if row else None  # noqa: SLF001 - the documented way to a row's names
