"""qualifiers.csv, whole."""

from __future__ import annotations

import re
from collections import Counter
from itertools import groupby

Rows = list[dict[str, str]]

COLUMNS = [
    "axis",
    "value",
    "label",
    "snomed",
    "snomed_display",
    "snomed_fit",
    "snomed_confidence",
    "loinc",
    "loinc_display",
    "loinc_confidence",
    "hpo",
    "hpo_display",
    "dicom",
    "dicom_display",
    "ordinal",
    "interpretation",
    "source",
    "since",
]


def test_columns(qualifiers: Rows) -> None:
    assert list(qualifiers[0]) == COLUMNS


def test_each_axis_stands_in_one_block_headed_by_its_own_row(qualifiers: Rows) -> None:
    blocks = [
        (axis, [row["value"] for row in block]) for axis, block in groupby(qualifiers, lambda r: r["axis"])
    ]
    assert [axis for axis, _ in blocks] == sorted({axis for axis, _ in blocks})
    for axis, values in blocks:
        assert values[0] == "", axis
        assert "" not in values[1:], axis
        assert len(set(values)) == len(values), axis


def test_ids_are_kebab_words(qualifiers: Rows) -> None:
    word = r"[a-z0-9]+(-[a-z0-9]+)*"
    for row in qualifiers:
        assert re.fullmatch(rf"{word}(\.{word})?", row["axis"]), row["axis"]
        assert not row["value"] or re.fullmatch(word, row["value"]), (row["axis"], row["value"])


def test_labels_are_unique_within_an_axis(qualifiers: Rows) -> None:
    twice = Counter((row["axis"], row["label"].casefold()) for row in qualifiers if row["value"])
    assert [key for key, n in twice.items() if n > 1] == []
    assert all(row["label"] == row["label"].strip() != "" for row in qualifiers)


def test_only_the_numeric_axis_has_no_values(qualifiers: Rows) -> None:
    counted = Counter(row["axis"] for row in qualifiers)
    assert [axis for axis, n in counted.items() if n == 1] == ["grade"]


def test_ordinals_rise_within_an_axis_and_readings_are_known(qualifiers: Rows) -> None:
    for axis, block in groupby(qualifiers, lambda r: r["axis"]):
        ordinals = [int(row["ordinal"]) for row in block if row["ordinal"]]
        assert ordinals == sorted(set(ordinals)), axis
    assert {row["interpretation"] for row in qualifiers} <= {"", "N", "A", "IND"}


def test_every_axis_is_used(findings: Rows, qualifiers: Rows) -> None:
    used = {axis for row in findings for axis in (row["answers"], *row["qualifiers"].split())}
    fixed = {"presence"}  # asked of every finding, so no row names it
    assert {row["axis"] for row in qualifiers} - used == fixed


def test_presence_holds_the_five_answers(qualifiers: Rows) -> None:
    found = {row["value"]: row["snomed"] for row in qualifiers if row["axis"] == "presence" and row["value"]}
    assert found == {
        "present": "52101004",
        "absent": "2667000",
        "uncertain": "",
        "not-examined": "",
        "not-examinable": "",
    }


def test_manoeuvre_responses_share_one_list_of_answers(qualifiers: Rows) -> None:
    shared = {"louder", "softer", "unchanged", "not-done", "only-then"}
    for axis in [
        "valsalva",
        "squat",
        "stand",
        "handgrip",
        "leg-raise",
        "inspiration",
        "expiration",
        "long-rr",
        "position",
    ]:
        found = {row["value"] for row in qualifiers if row["axis"] == f"response.{axis}" and row["value"]}
        assert found == shared, axis


def test_sites_are_the_same_wherever_a_site_is_asked(qualifiers: Rows) -> None:
    def values(axis: str) -> list[tuple[str, str, str]]:
        return [(r["value"], r["label"], r["snomed"]) for r in qualifiers if r["axis"] == axis and r["value"]]

    assert values("site") == values("loudest-site")
    # No body structure is called an auscultation area: landmarks, marked as broader.
    areas = {"aortic", "pulmonary", "erb", "tricuspid", "mitral"}
    assert {r["snomed_fit"] for r in qualifiers if r["axis"] == "site" and r["value"] in areas} == {"broader"}
