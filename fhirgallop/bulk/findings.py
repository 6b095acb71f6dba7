"""Findings as columns (Apache Parquet), a row a finding with the keys of its examination, for analysis.

Needs the extra `[bulk]`. Numbers are doubles in the finding's unit; exact digits stand in the Observation.
"""

from __future__ import annotations

from collections.abc import Iterator
from importlib.util import find_spec
from typing import IO, TYPE_CHECKING, Any, Final

from fhirgallop.bulk.wish import BulkError
from fhirgallop.exam.entry import Entry
from fhirgallop.exam.exam import Exam

if TYPE_CHECKING:
    from pyarrow import Schema

FINDINGS: Final = "findings"


def needed() -> None:
    """Makes sure that Parquet can be written.

    Raises:
        BulkError: the extra is not installed.
    """
    if find_spec("pyarrow") is None:
        raise BulkError("Parquet needs the extra [bulk]: pip install 'fhirgallop[bulk]'")


def rows_of(exam: Exam) -> Iterator[dict[str, Any]]:
    """The rows of one examination."""
    keys = {
        "patient_system": exam.patient.system,
        "patient": exam.patient.value,
        "exam_system": exam.identifier_system,
        "exam": exam.identifier,
        "time": exam.time.start,
        "time_end": exam.time.end or None,
        "status": exam.status,
    }
    for entry in exam.entries:
        yield {**keys, **_columns(entry)}


def _columns(entry: Entry) -> dict[str, Any]:
    measure = entry.measure
    return {
        "finding": entry.finding,
        "instance": entry.instance,
        "presence": entry.presence.value,
        "withdrawn": entry.withdrawn,
        "answers": list(entry.answers),
        "value": float(measure.value) if measure else None,
        "value_high": float(measure.high) if measure and measure.high is not None else None,
        "comparator": measure.comparator or None if measure else None,
        "unit": measure.unit if measure else None,
        "qualifiers": [
            {"axis": q.axis, "value": str(q.grade) if q.grade else q.value or q.text}
            for q in entry.qualifiers
        ],
        "text": entry.text or None,
        "entry_time": entry.time or None,
    }


def schema() -> Schema:
    """The columns."""
    import pyarrow as pa  # noqa: PLC0415 - of an extra

    text, number = pa.string(), pa.float64()
    qualifier = pa.struct([("axis", text), ("value", text)])
    types = {
        "withdrawn": pa.bool_(), "answers": pa.list_(text), "value": number, "value_high": number,
        "qualifiers": pa.list_(qualifier),
    }  # fmt: skip
    names = (
        "patient_system", "patient", "exam_system", "exam", "time", "time_end", "status", "finding",
        "instance", "presence", "withdrawn", "answers", "value", "value_high", "comparator", "unit",
        "qualifiers", "text", "entry_time",
    )  # fmt: skip
    return pa.schema([(name, types.get(name, text)) for name in names])


def write(rows: list[dict[str, Any]], file: IO[bytes]) -> None:
    """One Parquet file."""
    import pyarrow as pa  # noqa: PLC0415 - of an extra
    from pyarrow import parquet  # noqa: PLC0415

    parquet.write_table(pa.Table.from_pylist(rows, schema=schema()), file)
