"""The same coding on a Spark cluster: records of a column, or of files that every executor can read.

Needs the extra `[spark]`. The lines are those that `fhirgallop backfill` writes, byte for byte, in whatever
order the cluster gives. What a lost executor was doing is done again by Spark; nothing is written from here.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from functools import lru_cache
from pathlib import Path
from typing import TYPE_CHECKING, Final

import msgspec

from fhirgallop.bulk.coding import code, template_of
from fhirgallop.bulk.part import Job, count, jobs_of, reads_of
from fhirgallop.bulk.tally import Tally
from fhirgallop.bulk.wish import Source, Wish
from fhirgallop.intake.detect import open_records
from fhirgallop.intake.midway import START
from fhirgallop.intake.reading import Read
from fhirgallop.mapping.template_map import TemplateMap

if TYPE_CHECKING:
    import pyarrow as pa
    from pyspark.sql import DataFrame, SparkSession

TALLY: Final = "tally"
COLUMNS: Final = "kind string, text string"
_LINES_A_BATCH: Final = 2_000

Batches = Iterator["pa.RecordBatch"]


def code_column(frame: DataFrame, column: str, wish: Wish) -> DataFrame:
    """Every record of a column coded.

    Args:
        frame: any frame.
        column: its column of JSON text, one record a row; issues name no file and no line.
        wish: how records are coded.

    Returns:
        A frame of `kind` (resource type, `OperationOutcome`, `errors`, or `tally`) and `text` (JSON).
    """
    return frame.select(column).mapInArrow(_over(wish, _records), COLUMNS)


def code_files(session: SparkSession, inputs: Sequence[Source], wish: Wish) -> DataFrame:
    """Every record of files coded; the driver cuts them into parts, executors read the parts.

    Args:
        session: the cluster.
        inputs: files on storage that the driver and all executors reach by the same path.
        wish: how records are coded.

    Returns:
        A frame as `code_column` gives.
    """
    jobs = [(_written(job),) for file, source in enumerate(inputs) for job in jobs_of(file, source, wish)]
    frame = session.createDataFrame(jobs, "job string").repartition(max(len(jobs), 1))
    return frame.mapInArrow(_over(wish, _job_records), COLUMNS)


def tally_of(frame: DataFrame) -> Tally:
    """The counts of a coded frame, for `report`."""
    whole = Tally()
    for row in frame.where(frame["kind"] == TALLY).select("text").toLocalIterator():
        whole.merge(Tally.read(msgspec.json.decode(row.text)))
    return whole


def _written(job: Job) -> str:
    return msgspec.json.encode(job, enc_hook=str).decode()


def _records(text: str) -> Iterator[Read]:
    yield from open_records(text.encode("utf-8", "replace"), content_type="application/json", since=START)


def _job_records(text: str) -> Iterator[Read]:
    yield from reads_of(msgspec.json.decode(text, type=Job, dec_hook=lambda _, value: Path(value)))


def _over(wish: Wish, records: Callable[[str], Iterator[Read]]) -> Callable[[Batches], Batches]:
    """What executors do with batches of rows."""

    def over(batches: Batches) -> Batches:
        import pyarrow as pa  # noqa: PLC0415 - of an extra

        template, tally = _template(wish), Tally()
        names = ["kind", "text"]
        lines: list[tuple[str, str]] = []
        for batch in batches:
            for cell in batch.column(0):
                for read in records(cell.as_py() or ""):
                    coded = code(read, template, wish)
                    count(coded, tally, wish)
                    lines += [(kind, text.decode()) for kind, text in coded.written()]
                    if len(lines) >= _LINES_A_BATCH:
                        yield pa.RecordBatch.from_arrays([*map(pa.array, zip(*lines, strict=True))], names)
                        lines = []
        lines.append((TALLY, msgspec.json.encode(tally.as_dict()).decode()))
        yield pa.RecordBatch.from_arrays([*map(pa.array, zip(*lines, strict=True))], names)

    return over


@lru_cache(maxsize=4)
def _template(wish: Wish) -> TemplateMap:
    """The map, read once in each executor's process."""
    return template_of(wish)
