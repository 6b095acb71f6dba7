"""Worked values of published formulas and tables; the source stands beside each in the case files.

worked_values.csv: 102 lines for 100 worked values (two give a pair). published_examples.csv: examples printed
in articles, guideline tables and teaching pages.
"""

from __future__ import annotations

import csv
from decimal import Decimal
from pathlib import Path

import pytest

from fhirgallop.haemodynamics import CLASSIFICATIONS, COMPUTATIONS, Grade, Result
from fhirgallop.haemodynamics.tables import load

CASES = Path(__file__).resolve().parent.parent / "cases" / "haemodynamics"


def rows(name: str) -> list[dict[str, str]]:
    with (CASES / name).open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file, strict=True))


def entries(cell: str) -> dict[str, Decimal | bool | str]:
    found: dict[str, Decimal | bool | str] = {}
    for name, _, text in (part.partition("=") for part in cell.split(";")):
        kind = load().inputs[name].kind
        found[name] = text == "yes" if kind == "flag" else text if kind == "choice" else Decimal(text)
    return found


def half_a_place(printed: str) -> Decimal:
    """Half a unit of the last printed digit."""
    return Decimal(5).scaleb(Decimal(printed).as_tuple().exponent - 1)


WORKED = rows("worked_values.csv")
PUBLISHED = rows("published_examples.csv")


def label(row: dict[str, str]) -> str:
    return f"{row['id']}-{row['expected']}"


@pytest.mark.parametrize("row", WORKED, ids=[f"{row['number']}-{label(row)}" for row in WORKED])
def test_worked_value(row: dict[str, str]) -> None:
    given = entries(row["inputs"])
    if row["id"] in COMPUTATIONS:
        answer = COMPUTATIONS[row["id"]](**given)
        assert isinstance(answer, Result), str(answer)
        assert abs(answer.value - Decimal(row["expected"])) <= half_a_place(row["expected"])
        return
    grade = CLASSIFICATIONS[row["id"]](edition=row["edition"], **given)
    assert isinstance(grade, Grade), str(grade)
    assert grade.grade == row["expected"]
    if row["derived"]:
        assert abs(grade.derived[0].value - Decimal(row["derived"])) <= half_a_place(row["derived"])
        assert grade.derived[-1].value == grade.derived[0].value


@pytest.mark.parametrize("row", PUBLISHED, ids=[f"{n}-{label(row)}" for n, row in enumerate(PUBLISHED)])
def test_published_example(row: dict[str, str]) -> None:
    given = entries(row["inputs"])
    if row["id"] in COMPUTATIONS:
        answer = COMPUTATIONS[row["id"]](**given)
        assert isinstance(answer, Result), str(answer)
        assert abs(answer.value - Decimal(row["expected"])) <= Decimal(row["within"])
        return
    grade = CLASSIFICATIONS[row["id"]](edition=row["edition"], **given)
    assert isinstance(grade, Grade), str(grade)
    assert grade.grade == row["expected"]


def test_rate_changes_of_framingham_and_hodges() -> None:
    """PMC8275798, figure 1: from tracing B to C they rise by 58 and 48 ms (rates printed rounded)."""
    for name, rise in (("ecg.qtc-framingham", 58), ("ecg.qtc-hodges", 48)):
        slow = COMPUTATIONS[name](qt_ms=405, heart_rate_per_min=52.6)
        fast = COMPUTATIONS[name](qt_ms=395, heart_rate_per_min=85.9)
        assert isinstance(slow, Result)
        assert isinstance(fast, Result)
        assert abs(fast.value - slow.value - rise) < 1


def test_case_file_is_the_whole_evidence_table(shared: Path) -> None:
    """All hundred worked values of the evidence folder are in our case file, in its order."""
    text = (shared / "evidence" / "knowledge_checks.tsv").read_text(encoding="utf-8")
    table = list(csv.DictReader(text.splitlines(), delimiter="\t", quoting=csv.QUOTE_NONE))
    assert len(table) == 100
    assert {int(row["number"]) for row in WORKED} == set(range(1, 101))
    compared = 0
    for row in WORKED:
        printed = table[int(row["number"]) - 1]["result"]
        if row["id"] in COMPUTATIONS:
            assert row["expected"] in printed.split(" / ")
            compared += 1
        elif row["id"] == "score.h2fpef":
            assert row["derived"] == printed
            compared += 1
        else:
            assert row["expected"].removesuffix(" range").split()[-1] in printed
            compared += 1
    assert compared == len(WORKED)
