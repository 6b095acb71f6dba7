"""Coding: one code of one system, with how well it fits and how sure we are of it."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

Fit = Literal["exact", "broader"]
Confidence = Literal["high", "medium", "own"]


@dataclass(frozen=True, slots=True)
class Coding:
    """A code as catalogued.

    Attributes:
        system: address of the code system.
        code: the code.
        display: a valid term of that code, as seen in its source.
        fit: exact, or broader than what is meant (then the text says the rest).
        confidence: how surely the code was seen; a site confirms `medium` in its own release.
    """

    system: str
    code: str
    display: str
    fit: Fit = "exact"
    confidence: Confidence = "high"

    def as_fhir(self) -> dict[str, str]:
        """The FHIR Coding of it."""
        return {"system": self.system, "code": self.code, "display": self.display}
