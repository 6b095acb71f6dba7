"""The one reader of the tables in `data/`: inputs, computations, classifications, conditions, cut-offs.

inputs.csv           every named input once: kind, unit, plausible range or choices
computations.csv     one row a formula: what it needs, may use and gives, source, places shown
classifications.csv  one row a classification and edition: what it may use, its grades from low to high
conditions.csv       when a formula or classification is refused, or given only with a caution
cutoffs.csv          every cut-off, with the edition it belongs to and the alternatives in print
A list inside a cell is separated by `;`. Each table is read and checked whole: a fault is an AssetError.
"""

from __future__ import annotations

import csv
import io
from collections.abc import Mapping
from dataclasses import dataclass, replace
from decimal import Decimal, InvalidOperation
from functools import cache
from importlib import resources
from types import MappingProxyType
from typing import Literal, TypeVar

from fhirgallop.errors import AssetError, SettingsError
from fhirgallop.haemodynamics.values import Number, as_decimal

T = TypeVar("T", bound=str)

Comparator = Literal["<", "<=", ">", ">=", "is"]
Kind = Literal["number", "flag", "choice"]
Access = Literal["seen", "seen in part", "memory", "definition", "common practice, no source"]

COMPARATORS: tuple[Comparator, ...] = ("<", "<=", ">", ">=", "is")
ACCESS: tuple[Access, ...] = ("seen", "seen in part", "memory", "definition", "common practice, no source")


@dataclass(frozen=True, slots=True)
class Input:
    """A named input; `least` and `most` are inclusive and mark what is plausible in an adult."""

    name: str
    kind: Kind
    label: str
    unit: str
    least: Decimal | None
    most: Decimal | None
    choices: tuple[str, ...]

    @property
    def limit(self) -> str:
        """The range or the choices, for a person."""
        if self.kind == "choice":
            return "one of " + ", ".join(self.choices)
        return (
            f"{self.least} to {self.most} {self.unit}".strip() if self.kind == "number" else "true or false"
        )


@dataclass(frozen=True, slots=True)
class Condition:
    """When `input` is on this side of `value`, the owner is refused, or gives its result with a caution."""

    of: str
    input: str
    comparator: Comparator
    value: Decimal | bool
    effect: Literal["refuse", "caution"]
    text: str


@dataclass(frozen=True, slots=True)
class Formula:
    """One row of computations.csv."""

    id: str
    label: str
    formula: str
    needs: tuple[str, ...]
    may_use: tuple[str, ...]
    gives: str
    unit: str
    decimals: int
    source: str
    access: Access
    cautions: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Scheme:
    """One row of classifications.csv: a classification in one edition, its grades from low to high."""

    id: str
    edition: str
    is_default: bool
    label: str
    may_use: tuple[str, ...]
    grades: tuple[str, ...]
    source: str
    access: Access
    cautions: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Cutoff:
    """One published cut-off; `alternatives` are other values in print, for a site to choose."""

    id: str
    of: str
    editions: tuple[str, ...]
    input: str
    comparator: Comparator
    value: Decimal | bool
    unit: str
    grade: str
    points: int
    alternatives: tuple[str, ...]
    access: Access
    note: str

    @property
    def words(self) -> str:
        """Comparator, value and unit, for a person."""
        if isinstance(self.value, bool):
            return "yes" if self.value else "no"
        return f"{self.comparator} {self.value} {self.unit if self.unit != '1' else ''}".strip()


class Cutoffs:
    """The cut-offs in force, looked up by id and edition; frozen: `with_values` gives another set."""

    def __init__(self, rows: tuple[Cutoff, ...]) -> None:
        self.rows = rows
        self._by_key = {(row.id, edition): row for row in rows for edition in row.editions}

    def find(self, name: str, edition: str) -> Cutoff:
        """The cut-off with this id in this edition; KeyError when there is none."""
        return self._by_key[name, edition]

    def of(self, owner: str, edition: str) -> tuple[Cutoff, ...]:
        """All cut-offs of a classification in an edition, in the order of the table."""
        return tuple(row for row in self.rows if row.of == owner and edition in row.editions)

    def with_values(self, values: Mapping[str, Number]) -> Cutoffs:
        """A site's own set: the same cut-offs with other numbers.

        Raises:
            SettingsError: for an id that does not exist, a yes/no criterion, or what is not a number.
        """
        numeric = {row.id for row in self.rows if not isinstance(row.value, bool)}
        chosen: dict[str, Decimal] = {}
        for name, value in values.items():
            number = as_decimal(value)
            if name not in numeric or number is None:
                raise SettingsError(f"cut-off {name}: no such number to set; see the list of cut-offs")
            chosen[name] = number
        return Cutoffs(
            tuple(
                replace(row, value=chosen[row.id], note=f"set by the site; published: {row.words}")
                if row.id in chosen
                else row
                for row in self.rows
            )
        )


@dataclass(frozen=True, slots=True)
class Tables:
    """All tables, checked against one another."""

    inputs: Mapping[str, Input]
    formulas: Mapping[str, Formula]
    schemes: Mapping[str, tuple[Scheme, ...]]
    conditions: Mapping[str, tuple[Condition, ...]]
    cutoffs: Cutoffs


@cache
def load() -> Tables:
    """The tables shipped in the package, read once."""
    inputs = {row["name"]: _input(row) for row in _rows("inputs.csv")}
    formulas = {row["id"]: _formula(row) for row in _rows("computations.csv")}
    schemes: dict[str, tuple[Scheme, ...]] = {}
    for row in _rows("classifications.csv"):
        schemes[row["id"]] = (*schemes.get(row["id"], ()), _scheme(row))
    conditions: dict[str, tuple[Condition, ...]] = {}
    for row in _rows("conditions.csv"):
        for owner in _list(row["of"]):
            conditions[owner] = (*conditions.get(owner, ()), _condition(owner, row))
    cutoffs = Cutoffs(tuple(_cutoff(row) for row in _rows("cutoffs.csv")))
    tables = Tables(
        MappingProxyType(inputs),
        MappingProxyType(formulas),
        MappingProxyType(schemes),
        MappingProxyType(conditions),
        cutoffs,
    )
    _check(tables)
    return tables


def _check(tables: Tables) -> None:
    owners = set(tables.formulas) | set(tables.schemes)
    used = {name for row in tables.formulas.values() for name in (*row.needs, *row.may_use)}
    used |= {name for rows in tables.schemes.values() for row in rows for name in row.may_use}
    named = used | {c.input for rows in tables.conditions.values() for c in rows}
    named |= {row.input for row in tables.cutoffs.rows if row.input}
    if unknown := named - set(tables.inputs):
        raise AssetError(f"haemodynamics tables: inputs without a row in inputs.csv: {sorted(unknown)}")
    if idle := set(tables.inputs) - named:
        raise AssetError(f"haemodynamics tables: inputs that nothing uses: {sorted(idle)}")
    cited = set(tables.conditions) | {row.of for row in tables.cutoffs.rows}
    if stray := cited - owners:
        raise AssetError(f"haemodynamics tables: conditions or cut-offs of nothing: {sorted(stray)}")
    for rows in tables.schemes.values():
        if sum(row.is_default for row in rows) != 1:
            raise AssetError(f"haemodynamics tables: {rows[0].id} needs exactly one default edition")
        for row in rows:
            grades = {c.grade for c in tables.cutoffs.of(row.id, row.edition)} - {"", *row.grades}
            if grades:
                raise AssetError(
                    f"haemodynamics tables: {row.id} {row.edition} has no grade {sorted(grades)}"
                )


def _rows(name: str) -> list[dict[str, str]]:
    text = (resources.files(__package__) / "data" / name).read_text(encoding="utf-8")
    rows = list(csv.DictReader(io.StringIO(text), strict=True))
    for line, row in enumerate(rows, 2):
        if None in row or None in row.values():
            raise AssetError(f"{name} row {line}: the number of cells differs from the heading")
    return rows


def _list(cell: str) -> tuple[str, ...]:
    return tuple(part.strip() for part in cell.split(";") if part.strip())


def _number(cell: str) -> Decimal | None:
    try:
        return Decimal(cell) if cell else None
    except InvalidOperation as error:
        raise AssetError(f"haemodynamics tables: {cell!r} is not a number") from error


def _one_of(cell: str, allowed: tuple[T, ...]) -> T:
    if cell not in allowed:
        raise AssetError(f"haemodynamics tables: {cell!r} is none of {', '.join(allowed)}")
    return cell


def _value(cell: str) -> Decimal | bool:
    if cell in ("yes", "no"):
        return cell == "yes"
    number = _number(cell)
    if number is None:
        raise AssetError("haemodynamics tables: a cut-off or condition has no value")
    return number


def _input(row: dict[str, str]) -> Input:
    kind: Kind = _one_of(row["kind"], ("number", "flag", "choice"))
    least, most = _number(row["least"]), _number(row["most"])
    if kind == "number" and (least is None or most is None or least >= most):
        raise AssetError(f"inputs.csv: {row['name']} needs a range")
    return Input(row["name"], kind, row["label"], row["unit"], least, most, _list(row["choices"]))


def _formula(row: dict[str, str]) -> Formula:
    return Formula(
        id=row["id"],
        label=row["label"],
        formula=row["formula"],
        needs=_list(row["needs"]),
        may_use=_list(row["may_use"]),
        gives=row["gives"],
        unit=row["unit"],
        decimals=int(row["decimals"]),
        source=row["source"],
        access=_one_of(row["access"], ACCESS),
        cautions=_list(row["cautions"]),
    )


def _scheme(row: dict[str, str]) -> Scheme:
    return Scheme(
        id=row["id"],
        edition=row["edition"],
        is_default=row["default"] == "yes",
        label=row["label"],
        may_use=_list(row["may_use"]),
        grades=_list(row["grades"]),
        source=row["source"],
        access=_one_of(row["access"], ACCESS),
        cautions=_list(row["cautions"]),
    )


def _condition(owner: str, row: dict[str, str]) -> Condition:
    effect: Literal["refuse", "caution"] = _one_of(row["effect"], ("refuse", "caution"))
    comparator: Comparator = _one_of(row["comparator"], COMPARATORS)
    return Condition(owner, row["input"], comparator, _value(row["value"]), effect, row["text"])


def _cutoff(row: dict[str, str]) -> Cutoff:
    return Cutoff(
        id=row["id"],
        of=row["of"],
        editions=_list(row["editions"]),
        input=row["input"],
        comparator=_one_of(row["comparator"], COMPARATORS),
        value=_value(row["value"]),
        unit=row["unit"],
        grade=row["grade"],
        points=int(row["points"] or 0),
        alternatives=_list(row["alternatives"]),
        access=_one_of(row["access"], ACCESS),
        note=row["note"],
    )
