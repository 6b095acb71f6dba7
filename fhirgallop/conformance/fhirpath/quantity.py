"""Quantities and their comparison across UCUM units.

Sources: FHIRPath N1 (v2.0.0), sections 6.1 and 6.2 (Quantity); The Unified Code for Units of Measure,
version 2.1, tables of prefixes, base units and derived units (the part clinical records use). A unit that is
not in the table compares with itself only; with any other the comparison is undecided.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from decimal import Decimal
from fractions import Fraction
from functools import lru_cache

UCUM = "http://unitsofmeasure.org"

# Calendar durations of FHIRPath and the UCUM units they convert to (section 4.1.8). Year and month are
# no definite durations, so they keep names of their own.
CALENDAR_UNITS = {
    "year": "year",
    "years": "year",
    "month": "month",
    "months": "month",
    "week": "wk",
    "weeks": "wk",
    "day": "d",
    "days": "d",
    "hour": "h",
    "hours": "h",
    "minute": "min",
    "minutes": "min",
    "second": "s",
    "seconds": "s",
    "millisecond": "ms",
    "milliseconds": "ms",
}

_PREFIXES = {
    "Y": 24, "Z": 21, "E": 18, "P": 15, "T": 12, "G": 9, "M": 6, "k": 3, "h": 2, "da": 1,
    "d": -1, "c": -2, "m": -3, "u": -6, "n": -9, "p": -12, "f": -15, "a": -18,
}  # fmt: skip

# Unit: (takes prefixes, factor, dimension). Dimensions: L length, T time, M mass, N arbitrary counts by name.
_ATOMS: dict[str, tuple[bool, Fraction, dict[str, int]]] = {
    "1": (False, Fraction(1), {}),
    "%": (False, Fraction(1, 100), {}),
    "m": (True, Fraction(1), {"L": 1}),
    "[in_i]": (False, Fraction(254, 10000), {"L": 1}),
    "[ft_i]": (False, Fraction(3048, 10000), {"L": 1}),
    "s": (True, Fraction(1), {"T": 1}),
    "min": (False, Fraction(60), {"T": 1}),
    "h": (False, Fraction(3600), {"T": 1}),
    "d": (False, Fraction(86400), {"T": 1}),
    "wk": (False, Fraction(604800), {"T": 1}),
    "mo": (False, Fraction(2629800), {"T": 1}),
    "a": (False, Fraction(31557600), {"T": 1}),
    "g": (True, Fraction(1), {"M": 1}),
    "t": (True, Fraction(1000000), {"M": 1}),
    "[lb_av]": (False, Fraction(45359237, 100000), {"M": 1}),
    "[oz_av]": (False, Fraction(45359237, 1600000), {"M": 1}),
    "L": (True, Fraction(1, 1000), {"L": 3}),
    "l": (True, Fraction(1, 1000), {"L": 3}),
    "Hz": (True, Fraction(1), {"T": -1}),
    "N": (True, Fraction(1000), {"M": 1, "L": 1, "T": -2}),
    "Pa": (True, Fraction(1000), {"M": 1, "L": -1, "T": -2}),
    "bar": (True, Fraction(100000000), {"M": 1, "L": -1, "T": -2}),
    "m[Hg]": (True, Fraction(133322000), {"M": 1, "L": -1, "T": -2}),
    "J": (True, Fraction(1000), {"M": 1, "L": 2, "T": -2}),
    "W": (True, Fraction(1000), {"M": 1, "L": 2, "T": -3}),
    "cal": (True, Fraction(4184), {"M": 1, "L": 2, "T": -2}),
    "dyn": (True, Fraction(1, 100), {"M": 1, "L": 1, "T": -2}),
    # a mole is 6.0221367 x 10^23 in UCUM; only its ratio to itself matters here
    "mol": (True, Fraction(1), {"mol": 1}),
    "eq": (True, Fraction(1), {"mol": 1}),
    "[iU]": (True, Fraction(1), {"[iU]": 1}),
    "[IU]": (True, Fraction(1), {"[iU]": 1}),
    "U": (True, Fraction(1, 60_000_000), {"mol": 1, "T": -1}),
    "V": (True, Fraction(1), {"V": 1}),
    "K": (True, Fraction(1), {"K": 1}),
}
_TERM = re.compile(r"(?P<unit>.*?[^0-9+-]|1)(?P<power>[+-]?[0-9]{1,2})?", re.ASCII | re.DOTALL)
_MAX_CODE = 100


@dataclass(frozen=True, slots=True)
class Quantity:
    """A number with its unit.

    Attributes:
        value: the number.
        unit: UCUM code, or another system's code or the printed unit.
        system: the system of the unit.
    """

    value: Decimal
    unit: str = "1"
    system: str = UCUM

    def compare(self, other: Quantity) -> int | None:
        """-1, 0 or 1; None when the units cannot be converted into each other."""
        if (self.unit, self.system) == (other.unit, other.system):
            return (self.value > other.value) - (self.value < other.value)
        mine, theirs = self._dimension(), other._dimension()
        if mine is None or theirs is None or mine[1] != theirs[1]:
            return None
        if _is_extreme(self.value) or _is_extreme(other.value):
            return None
        a, b = Fraction(self.value) * mine[0], Fraction(other.value) * theirs[0]
        return (a > b) - (a < b)

    def comparable(self, other: Quantity) -> bool:
        """True when both are of the same dimension."""
        if (self.unit, self.system) == (other.unit, other.system):
            return True
        mine, theirs = self._dimension(), other._dimension()
        return mine is not None and theirs is not None and mine[1] == theirs[1]

    def key(self) -> tuple[object, ...]:
        """Equal for two quantities that `compare` calls equal, to be used in sets."""
        dimension = self._dimension()
        if dimension is None or _is_extreme(self.value):
            return ("quantity", self.system, self.unit, self.value)
        return ("quantity", dimension[1], Fraction(self.value) * dimension[0])

    def __str__(self) -> str:
        return f"{self.value} '{self.unit}'"

    def _dimension(self) -> tuple[Fraction, tuple[tuple[str, int], ...]] | None:
        return _parsed(self.unit) if self.system == UCUM else None


def _is_extreme(value: Decimal) -> bool:
    """True for numbers that would take too long as fractions (1E+999999)."""
    return not value.is_finite() or abs(value.adjusted()) > 500 or len(value.as_tuple().digits) > 500


@lru_cache(maxsize=512)
def _parsed(code: str) -> tuple[Fraction, tuple[tuple[str, int], ...]] | None:
    """Factor and dimension of a UCUM code; None when a unit in it is not in the table."""
    if not code or len(code) > _MAX_CODE or "(" in code:
        return None
    factor = Fraction(1)
    dimension: dict[str, int] = {}
    for sign, term in _terms(re.sub(r"\{[^{}]*\}", "", code) or "1"):
        parsed = _term(term)
        if parsed is None:
            return None
        unit_factor, unit_dimension = parsed
        factor *= unit_factor**sign
        for name, power in unit_dimension.items():
            dimension[name] = dimension.get(name, 0) + power * sign
    return factor, tuple(sorted((name, power) for name, power in dimension.items() if power))


def _terms(code: str) -> list[tuple[int, str]]:
    """The terms of a code with +1 where they multiply and -1 where they divide ("/min" divides too)."""
    terms = []
    sign = 1
    for piece in re.split(r"([./])", code):
        if piece in (".", "/"):
            sign = -1 if piece == "/" else 1
        elif piece or sign == 1:
            terms.append((sign, piece or "1"))
    return terms


def _term(text: str) -> tuple[Fraction, dict[str, int]] | None:
    if power_of_ten := re.fullmatch(r"10[*^]([+-]?[0-9]{1,2})", text, re.ASCII):
        return Fraction(10) ** int(power_of_ten[1]), {}
    match = _TERM.fullmatch(text)
    if match is None:
        return None
    unit = _atom(match["unit"])
    if unit is None:
        return None
    power = int(match["power"] or 1)
    return unit[0] ** power, {name: count * power for name, count in unit[1].items()}


def _atom(text: str) -> tuple[Fraction, dict[str, int]] | None:
    if text in _ATOMS:
        return _ATOMS[text][1], _ATOMS[text][2]
    for length in (1, 2):
        prefix, atom = text[:length], text[length:]
        if prefix in _PREFIXES and atom in _ATOMS and _ATOMS[atom][0]:
            return Fraction(10) ** _PREFIXES[prefix] * _ATOMS[atom][1], _ATOMS[atom][2]
    return None
