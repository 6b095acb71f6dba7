"""What Spark's executors do, on Arrow batches without Spark: the lines of the one-machine path."""

from __future__ import annotations

import json
from collections import Counter
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import msgspec
import pyarrow as pa

from fhirgallop.bulk import spark
from fhirgallop.bulk.part import jobs_of
from fhirgallop.bulk.tally import Tally
from fhirgallop.bulk.wish import Wish, sources

Backfill = Callable[..., tuple[Path, Tally]]


def coded(wish: Wish, records: object, texts: list[str], size: int = 7) -> list[tuple[str, str]]:
    """All lines of some rows."""
    batches = (
        pa.RecordBatch.from_arrays([pa.array(texts[start : start + size])], ["text"])
        for start in range(0, len(texts), size)
    )
    over = spark._over(wish, records)  # type: ignore[arg-type]
    return [(row["kind"], row["text"]) for batch in over(batches) for row in batch.to_pylist()]


def written(out: Path) -> Counter[tuple[str, str]]:
    """All lines of a run's folder."""
    return Counter(
        (path.parent.name, line)
        for path in out.glob("*/*.ndjson")
        if path.name != "repeats.ndjson"
        for line in path.read_text(encoding="utf-8").splitlines()
    )


def test_parts_of_files_give_the_lines_of_the_one_machine_path(
    wish: Wish, table: Callable[[int], Path], backfill: Backfill
) -> None:
    source = table(90)
    source.write_text(source.read_text() + "E1,ragged\nE91,P1,soon,yes,70,no\n")
    out, tally = backfill(wish, source)
    jobs = [job for file, one in enumerate(sources([source])) for job in jobs_of(file, one, wish)]
    assert len(jobs) == 5
    lines = coded(wish, spark._job_records, [spark._written(job) for job in jobs], size=2)
    assert Counter(line for line in lines if line[0] != spark.TALLY) == written(out)
    whole = Tally()
    for kind, text in lines:
        if kind == spark.TALLY:
            whole.merge(Tally.read(msgspec.json.decode(text)))
    assert replace(whole, repeats=tally.repeats) == tally


def test_a_column_of_records_is_coded_row_by_row(wish: Wish) -> None:
    record = {"exam": "E1", "pid": "P1", "day": "2020-01-01", "murmur": "yes"}
    lines = coded(wish, spark._records, [json.dumps(record), "", "{", json.dumps({**record, "exam": "E2"})])
    kinds = Counter(kind for kind, _ in lines)
    assert kinds["DiagnosticReport"] == 2
    assert kinds["errors"] == 2
    assert kinds[spark.TALLY] == 1
