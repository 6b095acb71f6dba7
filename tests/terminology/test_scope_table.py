"""scope.csv: nothing of a bedside heart examination is left without a home."""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable

import pytest

Rows = list[dict[str, str]]


def test_every_field_is_covered_by_something_that_exists(
    findings: Rows,
    qualifiers: Rows,
    rows: Callable[[str], Rows],
    capsys: pytest.CaptureFixture[str],
) -> None:
    scope = rows("scope.csv")
    assert list(scope[0]) == ["field", "covered_by", "how"]
    known = {row["id"] for row in findings} | {f"axis:{row['axis']}" for row in qualifiers}
    covered = [row for row in scope if row["covered_by"] and set(row["covered_by"].split()) <= known]
    kinds = Counter(row["how"] for row in covered)
    with capsys.disabled():
        print(f"\nscope: {len(covered)} of {len(scope)} fields covered ({dict(kinds)})")
    assert len({row["field"] for row in covered}) == len(covered) >= 212
    assert set(kinds) == {"finding", "qualifier", "measure", "context"}


def test_how_agrees_with_what_covers(findings: Rows, rows: Callable[[str], Rows]) -> None:
    kind = {row["id"]: row["kind"] for row in findings}
    for row in rows("scope.csv"):
        first = row["covered_by"].split()[0]
        kinds = {kind[item] for item in row["covered_by"].split() if item in kind}
        assert (row["how"] == "qualifier") == first.startswith("axis:"), row["field"]
        if row["how"] == "measure":
            assert "quantity" in kinds, row["field"]


def test_the_fields_are_those_of_the_published_scope(
    rows: Callable[[str], Rows], evidence: Callable[[str], Rows]
) -> None:
    assert [row["field"] for row in rows("scope.csv")] == [
        row["field"] for row in evidence("exam-fields.tsv")
    ]
