"""Midway: a place between two records of a file from which it can be read on, as if from its start."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final


@dataclass(frozen=True, slots=True)
class Midway:
    """Where reading goes on, and what the part before has settled.

    Attributes:
        offset: bytes before this place.
        line: number of the line that starts here, from 1.
        count: messages before this place (HL7 v2 batches state how many they hold).
        names: names of the columns, of a table; empty at its start.
        delimiter: what stands between the cells.
        encoding: "utf-8" or "cp1252" once a line beyond ASCII has settled it.
    """

    offset: int = 0
    line: int = 1
    count: int = 0
    names: tuple[str, ...] = ()
    delimiter: str = ""
    encoding: str = ""


START: Final = Midway()
