"""What a step is handed for work that needs to know FHIR, which storage does not."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

from sqlalchemy import Connection


@dataclass(frozen=True, slots=True)
class Stored:
    """An examination as a database of an earlier form has it.

    Attributes:
        row: id of its submission.
        edition: FHIR edition of the Bundle.
        received: FHIR instant.
        bundle: the Bundle's bytes.
    """

    row: int
    edition: str
    received: str
    bundle: bytes


# Writes the rows of one examination's coded resources, on the connection of the step.
Keep = Callable[[Connection, Stored], None]
