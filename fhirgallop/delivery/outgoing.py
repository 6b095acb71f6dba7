"""Which submissions go out: those written as the site delivers, noted with the submission itself."""

from __future__ import annotations

from dataclasses import dataclass

from sqlalchemy import Connection

from fhirgallop.storage.outbox import RECORD_SYSTEM, enqueue
from fhirgallop.storage.submissions import Also, Submission


@dataclass(frozen=True, slots=True)
class Outgoing:
    """How the record system is written to; submissions in another way are kept and not delivered.

    Attributes:
        edition: FHIR edition that it takes.
        snomed: whether SNOMED CT codings are sent to it.
    """

    edition: str
    snomed: bool

    def also(self, submission: Submission, at: int) -> Also | None:
        """What notes the delivery in the submission's own transaction; None when it is not delivered.

        Args:
            submission: the version that is being stored.
            at: moment in milliseconds since 1970.
        """
        if (submission.edition, submission.snomed) != (self.edition, self.snomed):
            return None

        def note(connection: Connection, row: int) -> None:
            enqueue(connection, destination=RECORD_SYSTEM, submission=row, exam=submission.exam,
                    patient=submission.patient, at=at)  # fmt: skip

        return note
