"""Parquet: a row a finding, the same counts as everything else that is written."""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import pytest
from pyarrow import parquet

from fhirgallop.bulk import findings
from fhirgallop.bulk.tally import Tally
from fhirgallop.bulk.wish import BulkError, Wish

Backfill = Callable[..., tuple[Path, Tally]]


def test_rows_agree_with_what_was_counted(
    wish: Wish, table: Callable[[int], Path], backfill: Backfill
) -> None:
    out, tally = backfill(replace(wish, findings=True), table(50))
    rows = [
        row for path in sorted((out / "findings").iterdir()) for row in parquet.read_table(path).to_pylist()
    ]
    counted = Counter((row["time"][:4], row["finding"], row["presence"]) for row in rows)
    assert counted == tally.findings
    first = [row for row in rows if row["exam"] == "E0"]
    assert {row["patient"] for row in first} == {"P0"}
    rate = next(row for row in first if row["finding"] == "vital.heart-rate")
    assert (rate["unit"], 50 <= rate["value"] <= 110) == ("/min", True)
    assert "findings" not in (out / "manifest.json").read_text()


def test_the_extra_is_named_where_it_is_missing(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(findings, "find_spec", lambda _: None)
    with pytest.raises(BulkError, match=r"fhirgallop\[bulk\]"):
        findings.needed()
