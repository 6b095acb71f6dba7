"""Grades of chosen measurements: what is decided, what stays possible, what is marked as disagreeing."""

from __future__ import annotations

import csv
from decimal import Decimal
from pathlib import Path

import pytest

from fhirgallop.haemodynamics import CLASSIFICATIONS, Grade, Refusal
from fhirgallop.haemodynamics.tables import load

TABLE = Path(__file__).resolve().parent.parent / "cases" / "haemodynamics" / "grades.csv"


def rows() -> list[dict[str, str]]:
    with TABLE.open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file, strict=True))


def entry(name: str, text: str) -> Decimal | bool | str:
    kind = load().inputs[name].kind
    return text == "yes" if kind == "flag" else text if kind == "choice" else Decimal(text)


CASES = rows()


@pytest.mark.parametrize("row", CASES, ids=[f"{row['id']}: {row['why']}" for row in CASES])
def test_grade(row: dict[str, str]) -> None:
    pairs = (part.split("=") for part in row["inputs"].split(";"))
    given = {name: entry(name, text) for name, text in pairs}
    answer = CLASSIFICATIONS[row["id"]](edition=row["edition"], **given)
    assert isinstance(answer, Grade), str(answer)
    assert answer.grade == row["grade"]
    assert answer.possible == tuple(row["possible"].split(";"))
    assert answer.discordant == (row["discordant"] == "yes")


def test_every_classification_has_a_case() -> None:
    covered = {row["id"] for row in CASES}
    assert covered == set(CLASSIFICATIONS)


def test_every_cutoff_is_held_against_something() -> None:
    """A cut-off that no rule uses would be decoration: called bare, the rules judge all of theirs."""
    judged = {"h2fpef.low", "h2fpef.high"}
    for name, classify in CLASSIFICATIONS.items():
        for edition in classify.editions:
            for given in ({}, {"heart_rate_per_min": 70}, {"systolic_as_entered": 120}):
                if set(given) <= set(classify.accepts):
                    grade = classify(edition=edition, **given)
                    assert isinstance(grade, Grade)
                    judged |= {criterion.id for criterion in grade.criteria}
        assert {cutoff.id for cutoff in load().cutoffs.rows if cutoff.of == name} <= judged, name


def test_h2fpef_names_its_points_as_a_range() -> None:
    grade = CLASSIFICATIONS["score.h2fpef"](atrial_fibrillation_ever=True, age_years=72)
    assert isinstance(grade, Grade)
    assert [(item.name, item.value) for item in grade.derived] == [("points_least", 4), ("points_most", 9)]
    assert grade.possible == ("intermediate", "high")


def test_a_refusal_gathers_range_and_condition() -> None:
    answer = CLASSIFICATIONS["diastole.grade"](
        e_over_a=40, atrial_fibrillation_now=True, mitral_prosthesis=True
    )
    assert isinstance(answer, Refusal)
    assert {(reason.input, reason.kind) for reason in answer.reasons} == {
        ("e_over_a", "out-of-range"),
        ("atrial_fibrillation_now", "not-valid"),
        ("mitral_prosthesis", "not-valid"),
    }


def test_a_choice_outside_its_list_is_refused() -> None:
    answer = CLASSIFICATIONS["ventricle.geometry"](sex="other", relative_wall_thickness=0.4)
    assert isinstance(answer, Refusal)
    assert [(reason.input, reason.kind) for reason in answer.reasons] == [("sex", "not-a-choice")]
    assert "other" not in str(answer)
