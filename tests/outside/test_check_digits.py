"""Check digits against worked examples published elsewhere."""

from __future__ import annotations

import pytest

from fhirgallop.codes.checkdigits import loinc_ok, verhoeff_ok


@pytest.mark.parametrize(
    "code",
    [
        "14567894",  # Algorithm::CheckDigits manual, MXX_006 (Verhoeff): checkdigit of 1456789 is 4
        "404684003",  # HL7 FHIR R4, Observation 10.1.4.4.4: Clinical finding
        "363787002",  # same page: Observable entity
        "386053000",  # same page: Evaluation procedure
        "413350009",  # same page: Finding with explicit context
        "900000000000527005",  # HL7, Using SNOMED CT with FHIR, implicit concept maps: SAME AS
        "900000000000526001",  # same page: REPLACED BY
        "900000000000523009",  # same page: POSSIBLY EQUIVALENT TO
    ],
)
def test_published_identifiers_carry_a_right_verhoeff_digit(code: str) -> None:
    assert verhoeff_ok(code)
    for wrong in set("0123456789") - {code[-1]}:
        assert not verhoeff_ok(code[:-1] + wrong)


@pytest.mark.parametrize("position", range(8))
def test_verhoeff_catches_every_neighbours_swap(position: int) -> None:
    """Verhoeff 1969: all transpositions of unequal neighbours are found."""
    code = "404684003"
    if code[position] != code[position + 1]:
        swapped = code[:position] + code[position + 1] + code[position] + code[position + 2 :]
        assert not verhoeff_ok(swapped)


@pytest.mark.parametrize("code", ["", "12345", "0404684003", "40468400x", "1" * 19, "４０４６８４００３"])
def test_what_is_no_snomed_identifier(code: str) -> None:
    assert not verhoeff_ok(code)


@pytest.mark.parametrize(
    "code",
    [
        "12345-5",  # LOINC Users' Guide, appendix on mod 10 check digits (its worked example; from memory)
        "85354-9",  # HL7 FHIR R4 vital signs, table of codes: blood pressure panel
        "8480-6",  # same table: systolic blood pressure
        "8462-4",  # same table: diastolic blood pressure
        "8867-4",  # same table: heart rate
        "9279-1",  # same table: respiratory rate
        "2708-6",  # same table: oxygen saturation
        "8310-5",  # same table: body temperature
        "39156-5",  # same table: body mass index
        "29463-7",  # same table: body weight
        "8302-2",  # same table: body height
    ],
)
def test_published_loinc_numbers_carry_a_right_check_digit(code: str) -> None:
    assert loinc_ok(code)
    for wrong in set("0123456789") - {code[-1]}:
        assert not loinc_ok(code[:-1] + wrong)


@pytest.mark.parametrize(
    "code", ["8625-3", "8633-7", "10223-2", "8867", "-4", "8867-44", "LA9634-2", "8867-x"]
)
def test_what_is_no_loinc_number(code: str) -> None:
    """The first three were seen in print and are wrong (PR interval, QRS duration, a CDA sample)."""
    assert not loinc_ok(code)
