"""units.csv, whole."""

from __future__ import annotations

from collections.abc import Callable
from fractions import Fraction

Rows = list[dict[str, str]]


def test_columns_and_codes(rows: Callable[[str], Rows]) -> None:
    units = rows("units.csv")
    assert list(units[0]) == ["code", "printed", "dimension", "factor", "offset", "synonyms", "source"]
    codes = [row["code"] for row in units]
    assert len(set(codes)) == len(codes)
    assert all(row["code"] and row["printed"] and row["dimension"] and row["source"] for row in units)


def test_factors_are_exact_and_each_dimension_has_a_base(rows: Callable[[str], Rows]) -> None:
    base = set()
    for row in rows("units.csv"):
        factor, offset = Fraction(row["factor"]), Fraction(row["offset"])
        assert factor > 0, row["code"]
        if (factor, offset) == (1, 0):
            base.add(row["dimension"])
        if offset:
            assert row["dimension"] == "temperature", row["code"]
    assert base == {row["dimension"] for row in rows("units.csv")}


def test_no_spelling_means_two_units(rows: Callable[[str], Rows]) -> None:
    meant: dict[str, set[str]] = {}
    for row in rows("units.csv"):
        for spelling in (row["code"], row["printed"], *filter(None, row["synonyms"].split("|"))):
            assert spelling == spelling.strip(), row["code"]
            meant.setdefault(spelling, set()).add(row["code"])
    assert {spelling: codes for spelling, codes in meant.items() if len(codes) > 1} == {}


def test_what_clinics_write_is_known(rows: Callable[[str], Rows]) -> None:
    codes = {row["code"] for row in rows("units.csv")}
    assert codes >= {
        "kPa",
        "cm[H2O]",
        "mm[Hg]",
        "[in_i]",
        "[lb_av]",
        "[degF]",
        "Cel",
        "cm/s",
        "m/s",
        "ms",
        "s",
        "/min",
        "%",
        "mm",
        "cm",
        "m",
        "g",
        "kg",
        "mL",
        "L/min",
        "L/min/m2",
        "mL/m2",
        "cm2",
        "m2",
        "[wood'U]",
        "dyn.s.cm-5",
        "1",
        "{ratio}",
        "{score}",
        "deg",
    }
