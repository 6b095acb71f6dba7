"""Units: the UCUM codes that fhirgallop accepts, their local spellings, and exact conversion.

The table is terminology/units.csv; sources of its factors stand there (UCUM 2.1 and the SI brochure).
"""

from __future__ import annotations

import csv
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from decimal import Decimal, localcontext
from fractions import Fraction
from functools import cache

from fhirgallop import assets


@dataclass(frozen=True, slots=True)
class Unit:
    """One unit: `base value = value * factor + offset` in the base unit of its dimension."""

    code: str
    printed: str
    dimension: str
    factor: Fraction
    offset: Fraction


class UnitTable:
    """The units known, found by UCUM code or by a clinic's spelling."""

    def __init__(self, rows: Iterable[Mapping[str, str]]) -> None:
        self.by_code: dict[str, Unit] = {}
        self._spelled: dict[str, Unit] = {}
        folded: dict[str, set[str]] = {}
        for row in rows:
            unit = Unit(
                row["code"], row["printed"], row["dimension"],
                Fraction(row["factor"]), Fraction(row["offset"] or 0),
            )  # fmt: skip
            self.by_code[unit.code] = unit
            for spelling in (unit.code, unit.printed, *filter(None, row["synonyms"].split("|"))):
                self._spelled.setdefault(spelling, unit)
                folded.setdefault(spelling.casefold(), set()).add(unit.code)
        self._folded = {
            spelling: self.by_code[next(iter(codes))] for spelling, codes in folded.items() if len(codes) == 1
        }

    def find(self, text: str) -> Unit | None:
        """The unit written as `text`: exact spelling first, then without regard to case where unique."""
        text = text.strip()
        return self._spelled.get(text) or self._folded.get(text.casefold())


def convert(value: Decimal, source: Unit, target: Unit) -> Decimal:
    """`value` of `source` in `target`, rounded to one digit more than was given (at least four).

    Raises:
        ValueError: the units measure different things.
    """
    if source.dimension != target.dimension:
        raise ValueError(f"{source.code} and {target.code} measure different things")
    if source == target:
        return value
    exact = (Fraction(value) * source.factor + source.offset - target.offset) / target.factor
    digits = max(len(value.as_tuple().digits) + 1, 4)
    with localcontext() as context:
        context.prec = digits
        rounded = Decimal(exact.numerator) / Decimal(exact.denominator)
    plain = rounded.normalize()
    return plain.quantize(Decimal(1)) if plain == plain.to_integral_value() else plain


@cache
def table() -> UnitTable:
    """The shipped unit table."""
    with assets.path("terminology", "units.csv").open(encoding="utf-8", newline="") as file:
        return UnitTable(csv.DictReader(file))
