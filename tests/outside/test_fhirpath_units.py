"""Comparison of quantities in FHIRPath beside the conversions of a general-purpose UCUM library (ucumvert).

UCUM 2.1 gives the metre of mercury as 133.322 kPa, the library with more digits: hence the margin of 1e-5.
"""

from __future__ import annotations

from decimal import Decimal
from functools import cache
from typing import Any

import pytest

from fhirgallop.conformance.fhirpath.quantity import Quantity

GROUPS = [
    ["m", "cm", "mm", "km", "um", "[in_i]", "[ft_i]"],
    ["s", "ms", "min", "h", "d", "wk", "mo", "a"],
    ["g", "kg", "mg", "ug", "ng", "[lb_av]", "[oz_av]"],
    ["L", "mL", "dL", "uL", "cm3", "m3", "fL"],
    ["Pa", "kPa", "mm[Hg]", "bar", "N/m2", "dyn/cm2"],
    ["m/s", "cm/s", "km/h"],
    ["/min", "Hz", "1/h"],
    ["mg/dL", "g/L", "kg/m3", "ug/mL"],
    ["mmol/L", "umol/mL", "mol/m3"],
    ["L/min", "mL/s"],
    ["mL/min/{1.73_m2}", "L/h"],
    ["J", "kcal", "W.h"],
    ["10*9/L", "10*3/uL", "/pL"],
    ["%", "1"],
    ["dyn.s.cm-5", "Pa.s/m3"],
    ["mL/kg/min", "L/kg/h"],
]


@cache
def _registry() -> Any:
    return pytest.importorskip("ucumvert", reason="ucumvert is not installed").PintUcumRegistry()


def _library_ratio(code: str, base: str) -> float:
    registry = _registry()
    return float(registry.from_ucum(code).to(registry.from_ucum(base).units).magnitude)


@pytest.mark.parametrize("group", GROUPS, ids=lambda group: group[0])
def test_units_of_one_dimension_convert_as_in_the_library(group: list[str]) -> None:
    base = group[0]
    for code in group[1:]:
        ratio = _library_ratio(code, base)
        one = Quantity(Decimal(1), code)
        assert one.comparable(Quantity(Decimal(1), base)), code
        assert one.compare(Quantity(Decimal(repr(ratio * 0.99999)), base)) == 1, code
        assert one.compare(Quantity(Decimal(repr(ratio * 1.00001)), base)) == -1, code


def test_units_of_different_dimensions_are_not_compared() -> None:
    for one in GROUPS[:5]:
        for other in GROUPS[:5]:
            if one is not other:
                assert Quantity(Decimal(1), one[0]).compare(Quantity(Decimal(1), other[0])) is None


@pytest.mark.parametrize(
    "code", ["", "foo", "m//s", "(m)", "m.", "10*", "{a", "a" * 5000, "m/" * 90, "/", "m99", "-"]
)
def test_odd_codes_compare_with_themselves_only(code: str) -> None:
    assert Quantity(Decimal(1), code).compare(Quantity(Decimal(2), code)) == -1
    assert Quantity(Decimal(1), code).compare(Quantity(Decimal(2), "mg")) is None
    assert isinstance(hash(Quantity(Decimal(1), code).key()), int)
