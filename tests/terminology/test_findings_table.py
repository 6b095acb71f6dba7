"""findings.csv, whole."""

from __future__ import annotations

import re
from collections.abc import Callable
from decimal import Decimal

Rows = list[dict[str, str]]

COLUMNS = [
    "id",
    "label",
    "section",
    "kind",
    "category",
    "pathological",
    "snomed",
    "snomed_display",
    "snomed_fit",
    "snomed_confidence",
    "loinc",
    "loinc_display",
    "loinc_confidence",
    "hpo",
    "hpo_display",
    "answers",
    "unit",
    "low",
    "high",
    "method",
    "site",
    "qualifiers",
    "within",
    "source",
    "since",
]
SECTIONS = [
    "general",
    "symptom",
    "vital",
    "pressure",
    "rhythm",
    "pulses",
    "jvp",
    "palpation",
    "auscultation",
    "haemodynamic",
]


def test_columns(findings: Rows) -> None:
    assert list(findings[0]) == COLUMNS


def test_ids_are_unique_dotted_kebab_words(findings: Rows) -> None:
    ids = [row["id"] for row in findings]
    assert len(set(ids)) == len(ids)
    assert [i for i in ids if not re.fullmatch(r"[a-z0-9]+(-[a-z0-9]+)*(\.[a-z0-9]+(-[a-z0-9]+)*)*", i)] == []


def test_labels_are_unique_plain_words(findings: Rows) -> None:
    labels = [row["label"].casefold() for row in findings]
    assert len(set(labels)) == len(labels)
    assert all(row["label"] == row["label"].strip() != "" for row in findings)


def test_rows_are_sorted_by_section_then_id(findings: Rows) -> None:
    # the parts of a panel stand in the order in which they are written (systolic before diastolic)
    keys = [(SECTIONS.index(row["section"]), row["id"]) for row in findings if not row["within"]]
    assert keys == sorted(keys)


def test_closed_lists(findings: Rows) -> None:
    for row in findings:
        assert row["kind"] in {"sign", "choice", "quantity", "text", "panel"}, row["id"]
        assert row["category"] in {"exam", "vital-signs", "survey", "procedure", "imaging"}, row["id"]
        assert row["pathological"] in {"yes", "no", ""}, row["id"]
        assert row["since"] == "0.1.0", row["id"]


def test_kind_decides_what_else_a_row_carries(findings: Rows) -> None:
    for row in findings:
        assert bool(row["answers"]) == (row["kind"] == "choice"), row["id"]
        assert bool(row["unit"]) == (row["kind"] == "quantity"), row["id"]
        assert bool(row["low"]) == bool(row["high"]) == (row["kind"] == "quantity"), row["id"]
        if row["pathological"]:
            assert row["kind"] == "sign", row["id"]


def test_plausible_ranges_are_ranges_with_a_source(findings: Rows) -> None:
    for row in findings:
        if row["low"]:
            assert Decimal(row["low"]) < Decimal(row["high"]), row["id"]
            assert "range: " in row["source"], row["id"]


def test_every_reference_resolves(findings: Rows, qualifiers: Rows, rows: Callable[[str], Rows]) -> None:
    axes = {row["axis"] for row in qualifiers}
    values = {(row["axis"], row["value"]) for row in qualifiers if row["value"]}
    ids = {row["id"]: row for row in findings}
    units = {row["code"] for row in rows("units.csv")}
    for row in findings:
        for axis in (row["answers"], *row["qualifiers"].split()):
            assert not axis or axis in axes, (row["id"], axis)
        assert not row["method"] or ("method", row["method"]) in values, row["id"]
        assert not row["site"] or ("site", row["site"]) in values, row["id"]
        assert not row["unit"] or row["unit"] in units, row["id"]
        if row["within"]:
            assert ids[row["within"]]["kind"] == "panel", row["id"]


def test_a_choice_has_answers_to_choose_from(findings: Rows, qualifiers: Rows) -> None:
    for row in findings:
        if row["kind"] == "choice":
            assert sum(v["axis"] == row["answers"] and v["value"] != "" for v in qualifiers) >= 2, row["id"]


def test_vital_signs_carry_the_codes_and_units_that_the_core_profile_fixes(findings: Rows) -> None:
    """FHIR R4, Observation vital signs profile: table of codes and UCUM units."""
    fixed = {
        "vital.heart-rate": ("8867-4", "/min"),
        "vital.respiratory-rate": ("9279-1", "/min"),
        "vital.oxygen-saturation": ("2708-6", "%"),
        "vital.temperature": ("8310-5", "Cel"),
        "vital.height": ("8302-2", "cm"),
        "vital.weight": ("29463-7", "kg"),
        "vital.bmi": ("39156-5", "kg/m2"),
        "vital.blood-pressure": ("85354-9", ""),
        "pressure.systolic": ("8480-6", "mm[Hg]"),
        "pressure.diastolic": ("8462-4", "mm[Hg]"),
    }
    by_id = {row["id"]: row for row in findings}
    for finding, (code, unit) in fixed.items():
        row = by_id[finding]
        assert (row["loinc"], row["unit"], row["category"]) == (code, unit, "vital-signs"), finding
    assert (
        by_id["pressure.systolic"]["within"]
        == by_id["pressure.diastolic"]["within"]
        == "vital.blood-pressure"
    )


def test_the_fourth_and_third_heart_sounds(findings: Rows) -> None:
    by_id = {row["id"]: row for row in findings}
    fourth, third = by_id["heart-sound.s4"], by_id["heart-sound.s3"]
    assert (fourth["snomed"], fourth["snomed_fit"], fourth["snomed_confidence"]) == (
        "4592006",
        "exact",
        "high",
    )
    assert (third["snomed"], third["snomed_fit"]) == ("277455002", "exact")
    for row in (fourth, third):
        assert "chamber" in row["qualifiers"].split()
        assert row["pathological"] == ""
