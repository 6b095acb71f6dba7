"""Reads a patient's chart from the record system for a page, where one server is listed for everybody.

The page has no token of that server: it is read as an open one inside the house, or not at all. What may not
be read, or is not read in time, stays unknown and is said to be.
"""

from __future__ import annotations

import uuid
from dataclasses import dataclass
from typing import Any, Final

from fhirgallop.cards.discovery import SERVICES
from fhirgallop.cards.hooks import Call
from fhirgallop.cards.prefetch import read_prefetch
from fhirgallop.delivery.addresses import base_of
from fhirgallop.exam.exam import Party
from fhirgallop.service.fetching import EVERYONE, Fetcher
from fhirgallop.settings import Settings

_NOBODY_FOUND: Final = (
    "the record system does not know this patient, knows several, or did not answer in time"
)


@dataclass(frozen=True, slots=True)
class Fetched:
    """What was read, for chart.read; None where nothing was. `gaps`: what stays unknown, in words."""

    chart: dict[str, Any] | None
    gaps: tuple[str, ...]


class RecordSystem:
    """One FHIR server of the house.

    Args:
        fetcher: reads.
        base: the server's base, in its one spelling.
    """

    def __init__(self, fetcher: Fetcher, base: str) -> None:
        self._fetcher = fetcher
        self.base: Final = base

    def read(self, patient: Party) -> Fetched:
        """The chart of a patient."""
        id_: str | None = patient.value
        if not patient.is_fhir_id:
            id_ = self._fetcher.patient_id(self.base, patient.system, patient.value)
        if not id_:
            return Fetched(None, (_NOBODY_FOUND,))
        service = SERVICES[0]
        call = Call(
            str(uuid.UUID(int=0)), self.base, "Practitioner/page", id_, "", None, None, "",
            read_prefetch({}, service), None,
        )  # fmt: skip
        found = self._fetcher.complete(call, service, "").prefetch
        return Fetched(dict(found.usable) or None, tuple(found.gaps()))


def record_system(settings: Settings, fetcher: Fetcher | None) -> RecordSystem | None:
    """The server that is listed for everybody; None where there is none, or not just one."""
    listed = settings.cds_charts.get(EVERYONE, ())
    base = base_of(listed[0]) if len(listed) == 1 else None
    return RecordSystem(fetcher, base) if fetcher and base else None
