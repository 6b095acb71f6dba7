"""Context: what the chart knows of the patient beside today's examination. No FHIR here.

A fact carries a catalogue id, or an id of terminology/chart.csv, which this module alone reads.
"""

from __future__ import annotations

import csv
from collections.abc import Mapping
from dataclasses import dataclass
from datetime import datetime
from decimal import Decimal
from enum import StrEnum
from functools import cache
from types import MappingProxyType
from typing import Final, Literal

from fhirgallop import assets
from fhirgallop.codes import systems
from fhirgallop.codes.coding import Coding
from fhirgallop.errors import AssetError
from fhirgallop.exam.entry import Measure, Qualifier
from fhirgallop.exam.exam import Party

ChartKind = Literal["sign", "choice", "quantity"]
_KINDS: Final = ("sign", "choice", "quantity")


class State(StrEnum):
    """How a fact stands. Only PRESENT and ABSENT decide anything today."""

    PRESENT = "present"
    ABSENT = "absent"
    HISTORY = "history"
    """Resolved, in remission, abated: it was, and says nothing of today."""
    REFUTED = "refuted"
    """Ruled out or entered in error: never used."""
    UNCERTAIN = "uncertain"


class Source(StrEnum):
    """The kind of document a fact comes from."""

    EXAM = "exam"
    ECG = "ecg"
    MONITOR = "monitor"
    ECHO = "echo"
    CATHETER = "catheter"
    LABORATORY = "laboratory"
    IMAGING = "imaging"
    PROBLEM_LIST = "problem-list"
    PROCEDURE = "procedure"
    DEVICE = "device"
    DEMOGRAPHICS = "demographics"
    EARLIER_EXAM = "earlier-exam"
    REPORT = "report"
    OTHER = "other"


@dataclass(frozen=True, slots=True)
class Fact:
    """One thing the chart says; values that disagree are separate facts, all kept.

    Attributes:
        id: catalogue id, or an id of terminology/chart.csv.
        state: as recorded; a number or an answer counts as present.
        source: kind of document.
        answers: value ids, for a choice.
        measure: the number in the canonical unit of its id.
        qualifiers: severity, valve, pacing mode ... as in an exam entry.
        time: clinically relevant FHIR dateTime, as precise as written; empty when unknown.
        encounter: the encounter it belongs to, comparable with `Exam.encounter.value`; empty when unknown.
        reference: where it stands in the chart, for the reader (`Observation/123`).
        low_trust: read by a machine, copied forward or preliminary.
    """

    id: str
    state: State
    source: Source
    answers: tuple[str, ...] = ()
    measure: Measure | None = None
    qualifiers: tuple[Qualifier, ...] = ()
    time: str = ""
    encounter: str = ""
    reference: str = ""
    low_trust: bool = False

    def qualifier(self, axis: str) -> str:
        """The value recorded on an axis, such as `severity`; empty when none was."""
        return next((q.value for q in self.qualifiers if q.axis == axis), "")


@dataclass(frozen=True, slots=True)
class Context:
    """The chart of one patient at the moment `now` (with a zone)."""

    now: datetime
    facts: tuple[Fact, ...] = ()
    patient: Party | None = None


@dataclass(frozen=True, slots=True)
class FactDefinition:
    """One row of terminology/chart.csv: a fact that only a chart, not an examination, states."""

    id: str
    label: str
    kind: ChartKind
    answers: frozenset[str]
    unit: str
    low: Decimal | None
    high: Decimal | None
    qualifiers: frozenset[str]
    codings: tuple[Coding, ...]

    @property
    def parent(self) -> str:
        """Id of the fact this one is a kind of, by its dotted id."""
        return self.id.rpartition(".")[0]


@cache
def definitions() -> Mapping[str, FactDefinition]:
    """The facts of terminology/chart.csv by id.

    Raises:
        AssetError: the file is missing or a row is broken.
    """
    with assets.path("terminology", "chart.csv").open(encoding="utf-8", newline="") as file:
        rows = [_definition(row) for row in csv.DictReader(file)]
    found = {row.id: row for row in rows}
    if len(found) != len(rows):
        raise AssetError("chart.csv: an id stands twice")
    return MappingProxyType(found)


def _definition(row: Mapping[str, str]) -> FactDefinition:
    kind = row["kind"]
    if kind not in _KINDS:
        raise AssetError(f"chart.csv: {row['id']} has an unknown kind {kind!r}")
    return FactDefinition(
        id=row["id"],
        label=row["label"],
        kind=kind,  # type: ignore[arg-type]
        answers=frozenset(row["answers"].split()),
        unit=row["unit"],
        low=Decimal(row["low"]) if row["low"] else None,
        high=Decimal(row["high"]) if row["high"] else None,
        qualifiers=frozenset(row["qualifiers"].split()),
        codings=_codings(row),
    )


def _codings(row: Mapping[str, str]) -> tuple[Coding, ...]:
    found = []
    for column, system in (("snomed", systems.SNOMED), ("loinc", systems.LOINC)):
        if row[column]:
            fit: Literal["exact", "broader"] = "broader" if row.get(f"{column}_fit") == "broader" else "exact"
            sure: Literal["high", "medium"] = "medium" if row[f"{column}_confidence"] == "medium" else "high"
            found.append(Coding(system, row[column], row[f"{column}_display"], fit, sure))
    return (*found, Coding(systems.FINDINGS, row["id"], row["label"], "exact", "own"))
