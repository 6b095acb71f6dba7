"""Every factor of units.csv against a general-purpose UCUM library, and against handbook values."""

from __future__ import annotations

import csv
from fractions import Fraction
from functools import cache
from pathlib import Path
from typing import Any

import pytest

_TABLE = Path(__file__).parents[2] / "terminology" / "units.csv"
_ROWS = list(csv.DictReader(_TABLE.read_text(encoding="utf-8").splitlines()))
_BY_CODE = {row["code"]: row for row in _ROWS}
# Braces alone are an annotation and stand for the unit 1 (UCUM section 2.6); the library reads no such code.
_ANNOTATIONS = [row["code"] for row in _ROWS if row["code"].startswith("{")]


@cache
def _registry() -> Any:
    return pytest.importorskip("ucumvert", reason="ucumvert is not installed").PintUcumRegistry()


def _base(dimension: str) -> str:
    return next(
        row["code"]
        for row in _ROWS
        if row["dimension"] == dimension and row["factor"] == "1" and row["offset"] == "0"
    )


@pytest.mark.parametrize("code", [row["code"] for row in _ROWS if row["code"] not in _ANNOTATIONS])
def test_factor_and_offset_are_those_of_the_library(code: str) -> None:
    registry, row = _registry(), _BY_CODE[code]
    unit = registry.from_ucum(code).units
    base = registry.from_ucum(_base(row["dimension"])).units
    for value in (1.0, 250.0):
        ours = Fraction(value) * Fraction(row["factor"]) + Fraction(row["offset"])
        assert registry.Quantity(value, unit).to(base).magnitude == pytest.approx(float(ours), rel=1e-12)


def test_an_annotation_stands_for_one() -> None:
    assert _ANNOTATIONS
    for code in _ANNOTATIONS:
        assert (_BY_CODE[code]["factor"], _BY_CODE[code]["offset"]) == ("1", "0")


@pytest.mark.parametrize(
    ("value", "code", "expected", "base", "digits"),
    [
        # NIST SP 811 (2008), appendix B.8, seven digits as printed there (values from memory)
        ("1", "[in_i]", "2.54", "cm", 7),
        ("1", "[ft_i]", "30.48", "cm", 7),
        ("1", "[yd_i]", "91.44", "cm", 7),
        ("1", "[lb_av]", "0.4535924", "kg", 7),
        ("1", "[oz_av]", "0.02834952", "kg", 7),
        ("133.3224", "Pa", "1", "mm[Hg]", 6),
        ("98.0665", "Pa", "0.7355592", "mm[Hg]", 6),
        ("1", "cm[H2O]", "0.7355592", "mm[Hg]", 6),
        # The knowledge base of bedside findings, JV-14: cm[H2O] / 1.36 = mm[Hg]
        ("1.36", "cm[H2O]", "1", "mm[Hg]", 3),
        # Common practice, no source: 16 kPa is 120 mm[Hg], 98.6 degF is 37 Cel, a Wood unit 80 dyn.s.cm-5
        ("16", "kPa", "120", "mm[Hg]", 3),
        ("98.6", "[degF]", "37", "Cel", 9),
        ("-40", "[degF]", "-40", "Cel", 9),
        ("273.15", "K", "0", "Cel", 9),
        ("1", "[wood'U]", "80", "dyn.s.cm-5", 3),
        ("1", "[stone_av]", "6.35", "kg", 3),
    ],
)
def test_handbook_values(value: str, code: str, expected: str, base: str, digits: int) -> None:
    row, target = _BY_CODE[code], _BY_CODE[base]
    assert row["dimension"] == target["dimension"]
    assert (target["factor"], target["offset"]) == ("1", "0")
    ours = Fraction(value) * Fraction(row["factor"]) + Fraction(row["offset"])
    assert float(ours) == pytest.approx(float(expected), rel=10.0 ** (1 - digits), abs=1e-9)
