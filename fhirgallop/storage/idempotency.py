"""Answers by the sender's own key, so that a request sent again does nothing and gets the same answer.

A request that leaves one transaction behind puts its answer into it (`add`). One that leaves many reserves
its key first and puts the answer there when it is done (`finish`); what it has done until it breaks is done
again without effect.
"""

from __future__ import annotations

from dataclasses import dataclass, fields
from typing import Final

from sqlalchemy import Connection, Engine, delete, insert, select, update
from sqlalchemy.exc import IntegrityError

from fhirgallop.storage.submissions import told
from fhirgallop.storage.tables import idempotent_answers

RESERVED: Final = 0


@dataclass(frozen=True, slots=True)
class KeptAnswer:
    """One answer, or a reservation for it.

    Attributes:
        key: digest of caller and key.
        request: digest of the whole request.
        at: when, in milliseconds since 1970 (UTC).
        status: HTTP status; RESERVED before there is an answer.
        media_type: of the answer.
        headers: the answer's own, as a JSON object.
        answer: its bytes.
        patient: digest of the patient it tells of; empty where it tells of several, or of none.
    """

    key: str
    request: str
    at: int
    status: int = RESERVED
    media_type: str = ""
    headers: bytes = b"{}"
    answer: bytes = b""
    patient: str = ""


_NAMES = tuple(field.name for field in fields(KeptAnswer))


class Answers:
    """Reads answers and reserves keys; every method raises StorageError when the database failed."""

    def __init__(self, engine: Engine) -> None:
        self._engine = engine

    def find(self, key: str, *, since: int) -> KeptAnswer | None:
        """What is kept under a key; one from before `since` (milliseconds) is forgotten here."""
        table = idempotent_answers
        query = select(*(table.c[name] for name in _NAMES)).where(table.c.key == key)
        with told(), self._engine.connect() as connection:
            row = connection.execute(query).one_or_none()
        if row is None or row.at >= since:
            return KeptAnswer(*row) if row else None
        with told(), self._engine.begin() as connection:
            connection.execute(delete(table).where(table.c.key == key, table.c.at < since))
        return None

    def reserve(self, kept: KeptAnswer) -> bool:
        """Takes a key for one request; False when it is taken already."""
        try:
            with told(), self._engine.begin() as connection:
                add(connection, kept)
        except IntegrityError:
            return False
        return True

    def finish(self, kept: KeptAnswer) -> bool:
        """Puts the answer where the key was reserved; False when another one is there, or it was pruned."""
        table = idempotent_answers
        values = {name: getattr(kept, name) for name in _NAMES if name not in {"key", "request"}}
        same = (table.c.key == kept.key, table.c.request == kept.request, table.c.status == RESERVED)
        with told(), self._engine.begin() as connection:
            return connection.execute(update(table).where(*same).values(**values)).rowcount == 1

    def release(self, key: str, request: str) -> None:
        """Gives a reserved key back."""
        table = idempotent_answers
        same = (table.c.key == key, table.c.request == request, table.c.status == RESERVED)
        with told(), self._engine.begin() as connection:
            connection.execute(delete(table).where(*same))


def add(connection: Connection, kept: KeptAnswer) -> None:
    """Adds an answer in the caller's transaction.

    Raises:
        IntegrityError: there is one under this key.
    """
    values = {name: getattr(kept, name) for name in _NAMES}
    connection.execute(insert(idempotent_answers).values(**values))
