"""Examinations that were accepted, each version of each, and the Bundle each gave."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field, fields
from typing import Final

from sqlalchemy import Connection, Engine, bindparam, insert, select, union_all
from sqlalchemy.exc import IntegrityError, SQLAlchemyError

from fhirgallop.storage.tables import submissions
from fhirgallop.storage.writing import Act, Writer


class StorageError(Exception):
    """The database could not do what was asked and kept nothing of it; the text names the kind of failure."""


@dataclass(frozen=True, slots=True)
class Submission:
    """One accepted version of an examination, in one way of writing it.

    Attributes:
        exam: identity of the examination (`urn:uuid:...`).
        edition: FHIR edition of the Bundle.
        snomed: whether the Bundle has SNOMED CT codings.
        version: from 1.
        map_name: template map it was read by.
        map_version: its version.
        record_hash: SHA-256 of what the sender meant, to tell a repetition from a change.
        patient: digest of the patient's identifier.
        received: FHIR instant.
        bundle: the Bundle's bytes as answered.
        number: digest of the sender's number of the examination.
        id: its row; 0 before it is stored.
    """

    exam: str
    edition: str
    snomed: bool
    version: int
    map_name: str
    map_version: str
    record_hash: str
    patient: str
    received: str
    bundle: bytes
    number: str = ""
    id: int = field(default=0, compare=False)


@dataclass(frozen=True, slots=True)
class Seen:
    """A version that was accepted, without its Bundle; see Submission."""

    id: int
    exam: str
    patient: str
    edition: str
    snomed: bool
    version: int
    record_hash: str


# What is to be kept together with a submission: is given the connection of its transaction and the row's id.
Also = Callable[[Connection, int], None]

_NAMES = tuple(one.name for one in fields(Submission))
_COLUMNS = [submissions.c[name] for name in _NAMES]
_SEEN_NAMES = tuple(one.name for one in fields(Seen))
MANY_OTHERS: Final = 20
# made once: every examination asks and adds, and to make a statement costs as much as to run it
_SEEN_COLUMNS = [submissions.c[name] for name in _SEEN_NAMES]
_SEEN = union_all(
    select(*_SEEN_COLUMNS).where(submissions.c.exam == bindparam("same_exam")),
    # a sender whose numbers start anew with each patient has very many of one number
    select(
        select(*_SEEN_COLUMNS)
        .where(submissions.c.number == bindparam("same_number"), submissions.c.patient != bindparam("own"))
        .limit(MANY_OTHERS)
        .subquery()
    ),
)
_ADD = insert(submissions)


class Submissions:
    """Reads and writes submissions; every write is one transaction."""

    def __init__(self, engine: Engine) -> None:
        self._engine = engine
        self._writer = Writer(engine)

    def latest(self, exam: str, edition: str, *, snomed: bool) -> Submission | None:
        """The newest version of an examination, as it is written in that edition.

        Raises:
            StorageError: the database failed.
        """
        same = (submissions.c.exam == exam, submissions.c.edition == edition, submissions.c.snomed == snomed)
        query = select(*_COLUMNS).where(*same).order_by(submissions.c.version.desc()).limit(1)
        with told(), self._engine.connect() as connection:
            row = connection.execute(query).one_or_none()
        return Submission(*row) if row else None

    def seen(self, exam: str, number: str, patient: str) -> list[Seen]:
        """Every version of an examination, and at most MANY_OTHERS of other patients' with the same number.

        In every way of writing it, in the order in which they came.

        Args:
            exam: identity of the examination.
            number: digest of its number.
            patient: digest of its patient.

        Raises:
            StorageError: the database failed.
        """
        asked = {"same_exam": exam, "same_number": number, "own": patient}
        with told(), self._engine.connect() as connection:
            rows = connection.execute(_SEEN, asked).all()
        return sorted((Seen(*row) for row in rows), key=lambda one: one.id)

    def bundle(self, row: int) -> bytes | None:
        """The Bundle in a row.

        Raises:
            StorageError: the database failed.
        """
        query = select(submissions.c.bundle).where(submissions.c.id == row)
        with told(), self._engine.connect() as connection:
            found: bytes | None = connection.scalar(query)
        return found

    def ask(self, question: Callable[[Connection], bool]) -> bool:
        """What the database says to a question about what is kept beside the versions.

        Raises:
            StorageError: the database failed.
        """
        with told(), self._engine.connect() as connection:
            return question(connection)

    def add(self, submission: Submission, *also: Also) -> bool:
        """Stores one version, and what is to be kept with it, in one transaction.

        Args:
            submission: the version.
            also: called in order after the submission's row is written, on the same connection, each with
                the row's id: coded resources, deliveries, the answer by the sender's key, the audit record;
                perhaps by another thread, and once more (see Writer.keep).

        Returns:
            False when another request was first, with this version or with anything that `also` adds;
            nothing was then kept.

        Raises:
            StorageError: the database failed; nothing was kept.
        """
        values = {name: getattr(submission, name) for name in _NAMES if name != "id"}

        def act(connection: Connection) -> None:
            row = connection.execute(_ADD, values).inserted_primary_key
            for keep in also:
                keep(connection, row[0] if row else 0)

        return self._kept(act)

    def beside(self, row: int, *also: Also) -> bool:
        """Keeps what belongs to a version that is stored already, or to none (0), in one transaction.

        Returns:
            False when another request was first with anything that `also` adds; nothing was then kept.

        Raises:
            StorageError: the database failed; nothing was kept.
        """

        def act(connection: Connection) -> None:
            for keep in also:
                keep(connection, row)

        return self._kept(act)

    def _kept(self, act: Act) -> bool:
        try:
            with told():
                self._writer.keep(act)
        except IntegrityError:
            return False
        return True


@contextmanager
def told() -> Iterator[None]:
    """A failure of the database as a StorageError, without the statement and what it held."""
    try:
        yield
    except IntegrityError:
        raise
    except SQLAlchemyError as error:
        raise StorageError(type(getattr(error, "orig", None) or error).__name__) from None
