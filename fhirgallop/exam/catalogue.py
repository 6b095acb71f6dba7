"""The catalogue: every finding and qualifier that fhirgallop knows, read from terminology/*.csv.

One reader for findings.csv, qualifiers.csv and synonyms.csv. A row's meaning is described in
terminology/README.md.
"""

from __future__ import annotations

import csv
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from decimal import Decimal
from functools import cache, cached_property
from typing import Final, Literal

from fhirgallop import assets
from fhirgallop.codes import systems
from fhirgallop.codes.coding import Coding
from fhirgallop.errors import AssetError

Kind = Literal["sign", "choice", "quantity", "text", "panel"]

_CODE_COLUMNS: Final = (
    ("snomed", systems.SNOMED),
    ("loinc", systems.LOINC),
    ("hpo", systems.HPO),
    ("dicom", systems.DICOM),
)


@dataclass(frozen=True, slots=True)
class FindingDefinition:
    """One row of findings.csv; `low` and `high` bound what is plausible, in `unit`."""

    id: str
    label: str
    section: str
    kind: Kind
    category: str
    pathological: str
    codings: tuple[Coding, ...]
    answers: str
    unit: str
    low: Decimal | None
    high: Decimal | None
    method: str
    site: str
    qualifiers: frozenset[str]
    within: str

    @property
    def parent(self) -> str:
        """Id of the finding this one is a kind of, by its dotted id; empty for a top one."""
        return self.id.rpartition(".")[0]


@dataclass(frozen=True, slots=True)
class AxisValue:
    """One value of an axis: `timing` has `holosystolic`."""

    axis: str
    id: str
    label: str
    codings: tuple[Coding, ...]
    ordinal: int | None
    interpretation: str


@dataclass(frozen=True)
class Axis:
    """A qualifier, or the answers of a choice finding; `codings` is the code of the question itself."""

    id: str
    label: str
    codings: tuple[Coding, ...]
    values: Mapping[str, AxisValue]


@dataclass(frozen=True, slots=True)
class Synonym:
    """A clinician's wording for a finding id or an `axis:value`."""

    id: str
    wording: str
    kind: str


@dataclass(frozen=True)
class Catalogue:
    """Everything that can be said of an examination."""

    findings: Mapping[str, FindingDefinition]
    axes: Mapping[str, Axis]
    synonyms: tuple[Synonym, ...]

    def answers(self, finding: FindingDefinition) -> Mapping[str, AxisValue]:
        """The values that a choice finding may take."""
        return self.axes[finding.answers].values if finding.answers else {}

    @cached_property
    def parts(self) -> Mapping[str, tuple[FindingDefinition, ...]]:
        """Panel id -> the findings that are its components, in catalogue order."""
        found: dict[str, list[FindingDefinition]] = {}
        for finding in self.findings.values():
            if finding.within:
                found.setdefault(finding.within, []).append(finding)
        return {panel: tuple(members) for panel, members in found.items()}


@cache
def load() -> Catalogue:
    """The shipped catalogue.

    Raises:
        AssetError: a file is missing or contradicts another.
    """
    findings = {finding.id: finding for finding in map(_finding, _rows("findings.csv"))}
    axes = _axes()
    for finding in findings.values():
        for axis in (finding.answers, *finding.qualifiers):
            if axis and axis not in axes:
                raise AssetError(f"findings.csv: {finding.id} names an unknown axis {axis}")
        if finding.within and finding.within not in findings:
            raise AssetError(f"findings.csv: {finding.id} lies within an unknown finding {finding.within}")
    synonyms = tuple(Synonym(row["id"], row["wording"], row["kind"]) for row in _rows("synonyms.csv"))
    return Catalogue(findings, axes, synonyms)


def _rows(name: str) -> Iterator[dict[str, str]]:
    with assets.path("terminology", name).open(encoding="utf-8", newline="") as file:
        yield from csv.DictReader(file)


def _codings(row: Mapping[str, str]) -> tuple[Coding, ...]:
    found = []
    for column, system in _CODE_COLUMNS:
        if row.get(column):
            fit: Literal["exact", "broader"] = "broader" if row.get(f"{column}_fit") == "broader" else "exact"
            sure: Literal["high", "medium"] = (
                "medium" if row.get(f"{column}_confidence") == "medium" else "high"
            )
            found.append(Coding(system, row[column], row[f"{column}_display"], fit, sure))
    return tuple(found)


def _finding(row: Mapping[str, str]) -> FindingDefinition:
    kind = row["kind"]
    if kind not in ("sign", "choice", "quantity", "text", "panel"):
        raise AssetError(f"findings.csv: {row['id']} has an unknown kind {kind!r}")
    own = Coding(systems.FINDINGS, row["id"], row["label"], "exact", "own")
    return FindingDefinition(
        id=row["id"],
        label=row["label"],
        section=row["section"],
        kind=kind,  # type: ignore[arg-type]
        category=row["category"],
        pathological=row["pathological"],
        codings=(*_codings(row), own),
        answers=row["answers"],
        unit=row["unit"],
        low=Decimal(row["low"]) if row["low"] else None,
        high=Decimal(row["high"]) if row["high"] else None,
        method=row["method"],
        site=row["site"],
        qualifiers=frozenset(row["qualifiers"].split()),
        within=row["within"],
    )


def _axes() -> dict[str, Axis]:
    heads: dict[str, tuple[str, tuple[Coding, ...]]] = {}
    values: dict[str, dict[str, AxisValue]] = {}
    for row in _rows("qualifiers.csv"):
        axis, value = row["axis"], row["value"]
        code = f"{axis}:{value}" if value else axis
        codings = (*_codings(row), Coding(systems.QUALIFIERS, code, row["label"], "exact", "own"))
        if value:
            ordinal = int(row["ordinal"]) if row["ordinal"] else None
            values.setdefault(axis, {})[value] = AxisValue(
                axis, value, row["label"], codings, ordinal, row["interpretation"]
            )
        else:
            heads[axis] = (row["label"], codings)
    if missing := values.keys() - heads.keys():
        raise AssetError(f"qualifiers.csv: no row describes the axis {sorted(missing)[0]} itself")
    return {
        axis: Axis(axis, label, codings, values.get(axis, {})) for axis, (label, codings) in heads.items()
    }
