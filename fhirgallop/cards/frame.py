"""What the cards of one answer share, and the ids that follow from it."""

from __future__ import annotations

import uuid
from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Frame:
    """What all cards of one answer share.

    Attributes:
        instance: the hookInstance, from which the cards' ids follow.
        patient, encounter: FHIR ids; the encounter may be empty.
        critical: whether an urgent card is marked `critical`; else it is a `warning`.
        pages: address under which users reach this service's pages, ending in no slash; empty for none.
        acts: the client takes system actions: the Task to record today's rhythm is one, not a suggestion.
    """

    instance: str
    patient: str
    encounter: str
    critical: bool
    pages: str
    acts: bool = False

    def id(self, *parts: str) -> str:
        """The id of a part of this answer: the same for the same hookInstance."""
        return str(uuid.uuid5(uuid.UUID(self.instance), "\n".join(parts)))
