"""The audit trail: rows that are only ever added, in the transaction of what they tell of."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

from sqlalchemy import Connection, Engine, insert, select

from fhirgallop.storage.submissions import told
from fhirgallop.storage.tables import audit

_AT_ONCE = 1000


@dataclass(frozen=True, slots=True)
class AuditRow:
    """One event.

    Attributes:
        at: when, in milliseconds since 1970 (UTC).
        patient: digest of the patient's identifier; empty where the event is about none.
        event: a FHIR R4 AuditEvent as JSON.
    """

    at: int
    patient: str
    event: bytes


def add(connection: Connection, rows: Sequence[AuditRow]) -> None:
    """Adds events on the caller's connection, so that they stand or fall with what it writes."""
    if rows:
        values = [{"at": row.at, "patient": row.patient, "event": row.event} for row in rows]
        connection.execute(insert(audit), values)


class AuditTrail:
    """Adds events that tell of no writing of ours, and reads all of them.

    Every method raises StorageError when the database failed.
    """

    def __init__(self, engine: Engine) -> None:
        self._engine = engine

    def add(self, rows: Sequence[AuditRow]) -> None:
        """Adds events, all or none."""
        with told(), self._engine.begin() as connection:
            add(connection, rows)

    def read(
        self, *, since: int = 0, until: int | None = None, patients: Sequence[str] = ()
    ) -> Iterator[AuditRow]:
        """Events in the order in which they were added.

        Args:
            since: from this moment on, in milliseconds since 1970.
            until: before this moment.
            patients: of these alone, by their digests.
        """
        query = select(audit.c.at, audit.c.patient, audit.c.event).where(audit.c.at >= since)
        if until is not None:
            query = query.where(audit.c.at < until)
        if patients:
            query = query.where(audit.c.patient.in_(patients))
        with told(), self._engine.connect() as connection:
            for row in connection.execution_options(yield_per=_AT_ONCE).execute(query.order_by(audit.c.id)):
                yield AuditRow(*row)
