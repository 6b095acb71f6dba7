"""Units: local spellings, exact conversion, sensible rounding."""

from __future__ import annotations

from decimal import Decimal

import pytest
from hypothesis import given
from hypothesis import strategies as st

from fhirgallop.codes.units import convert, table

TABLE = table()


@pytest.mark.parametrize(
    ("spelling", "code"),
    [("mmHg", "mm[Hg]"), ("mm Hg", "mm[Hg]"), ("kPa", "kPa"), ("cmH2O", "cm[H2O]"), ("bpm", "/min"),
     ("°C", "Cel"), ("in", "[in_i]"), ("lb", "[lb_av]"), ("%", "%"), (" mm[Hg] ", "mm[Hg]"),
     ("MMHG", "mm[Hg]")],
)  # fmt: skip
def test_spellings(spelling, code):
    assert TABLE.find(spelling).code == code


@pytest.mark.parametrize("spelling", ["", "furlong", "mmHgg", "mm of something"])
def test_an_unknown_spelling_is_unknown(spelling):
    assert TABLE.find(spelling) is None


@pytest.mark.parametrize(
    ("value", "source", "target", "expected"),
    [("16.0", "kPa", "mm[Hg]", "120"), ("98.6", "[degF]", "Cel", "37"), ("70", "[in_i]", "cm", "177.8"),
     ("154", "[lb_av]", "kg", "69.85"), ("10", "cm[H2O]", "mm[Hg]", "7.356"), ("0.16", "s", "ms", "160"),
     ("1.2", "m/s", "cm/s", "120")],
)  # fmt: skip
def test_conversion(value, source, target, expected):
    made = convert(Decimal(value), TABLE.by_code[source], TABLE.by_code[target])
    assert made == Decimal(expected)


def test_the_same_unit_keeps_every_digit():
    unit = TABLE.by_code["mm[Hg]"]
    assert str(convert(Decimal("120.00"), unit, unit)) == "120.00"


def test_other_dimensions_are_refused():
    with pytest.raises(ValueError, match="different things"):
        convert(Decimal(1), TABLE.by_code["kg"], TABLE.by_code["cm"])


@given(st.sampled_from(sorted(TABLE.by_code)), st.data(), st.decimals(1, 1000, places=3))
def test_there_and_back_is_the_same_to_the_digits_given(code, data, value):
    unit = TABLE.by_code[code]
    same = [u for u in TABLE.by_code.values() if u.dimension == unit.dimension]
    other = data.draw(st.sampled_from(same))
    back = convert(convert(value, unit, other), other, unit)
    tolerance = (abs(float(value)) + abs(float(unit.offset))) * 0.002
    assert abs(float(back - value)) <= tolerance
