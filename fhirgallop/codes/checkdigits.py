"""Check digits of code systems: a mistyped code is caught before anything else is asked about it."""

from __future__ import annotations

from typing import Final

# One step of Verhoeff's permutation; position i of a number uses it i times over, and it has order 8.
_STEP: Final = (1, 5, 7, 6, 2, 8, 3, 0, 9, 4)


def _permutations() -> tuple[tuple[int, ...], ...]:
    rows = [tuple(range(10))]
    while len(rows) < 8:
        rows.append(tuple(_STEP[digit] for digit in rows[-1]))
    return tuple(rows)


_PERMUTE: Final = _permutations()


def _dihedral(a: int, b: int) -> int:
    """Product in the dihedral group of the pentagon: 0-4 are turns, 5-9 are reflections."""
    turn = a + b if a < 5 else a - b
    return turn % 5 + (0 if (a < 5) == (b < 5) else 5)


def _digits(text: str) -> bool:
    return text.isascii() and text.isdigit()


def verhoeff_ok(code: str) -> bool:
    """Whether `code` has the form of a SNOMED CT identifier and ends in its right check digit.

    6 to 18 digits, no leading zero, last digit by Verhoeff's dihedral scheme.

    Source: SNOMED CT Release File Specifications, chapter 6 (SCTID), with its appendix on the check
    digit; J. Verhoeff, Error Detecting Decimal Codes, Mathematical Centre Tract 29, Amsterdam 1969.
    """
    if not (_digits(code) and 6 <= len(code) <= 18 and code[0] != "0"):
        return False
    check = 0
    for position, digit in enumerate(reversed(code)):
        check = _dihedral(check, _PERMUTE[position % 8][int(digit)])
    return check == 0


def loinc_ok(code: str) -> bool:
    """Whether `code` has the form of a LOINC number and ends in its right check digit.

    1 to 7 digits, a hyphen, one digit by the mod 10 scheme: every second digit from the right is
    doubled, all digits of the results are summed, and the check digit fills up to the next ten.

    Source: LOINC Users' Guide, appendix "Calculating Mod 10 check digits".
    """
    body, hyphen, last = code.partition("-")
    if not (hyphen and _digits(body) and 1 <= len(body) <= 7 and _digits(last) and len(last) == 1):
        return False
    total = 0
    for position, digit in enumerate(reversed(body)):
        tens, ones = divmod(int(digit) * (2 if position % 2 == 0 else 1), 10)
        total += tens + ones
    return -total % 10 == int(last)
