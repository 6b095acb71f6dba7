"""The one place for what differs between R4 (4.0.1), R4B (4.3.0) and R5 (5.0.0) in what we write.

Observation, DiagnosticReport and Bundle, as far as we fill them, are the same in all three (compared element
by element with the published StructureDefinitions; `tests/observations/test_editions.py` repeats it). R5's
Provenance alone can name the patient and the encounter.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final, Literal

Edition = Literal["R4", "R4B", "R5"]


@dataclass(frozen=True, slots=True)
class EditionTraits:
    """What an edition allows beyond the common ground."""

    version: str
    provenance_names_patient: bool


EDITIONS: Final[dict[Edition, EditionTraits]] = {
    "R4": EditionTraits("4.0.1", provenance_names_patient=False),
    "R4B": EditionTraits("4.3.0", provenance_names_patient=False),
    "R5": EditionTraits("5.0.0", provenance_names_patient=True),
}
