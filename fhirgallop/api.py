"""The Python face: a record and a map in, a coded Bundle out; an examination and a chart in, a review out."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from fhirgallop.chart.read import read_chart
from fhirgallop.exam.context import Context
from fhirgallop.exam.exam import Exam
from fhirgallop.intake.detect import open_records
from fhirgallop.intake.questionnaire import read_response
from fhirgallop.intake.reading import Read
from fhirgallop.intake.record import LocalRecord
from fhirgallop.intake.rest import read_json
from fhirgallop.mapping.reading import load_map
from fhirgallop.mapping.template_map import TemplateMap
from fhirgallop.observations.editions import Edition
from fhirgallop.outcome import Issue, has_errors
from fhirgallop.pipeline import Result
from fhirgallop.pipeline import process as run
from fhirgallop.reasoning.review import Review
from fhirgallop.reasoning.review import review as conclude


def read_map(path: Path | str) -> TemplateMap:
    """The template map in the file at `path`.

    Raises:
        MapError: the map has faults; the exception carries all of them, each with its line and cure.
        OSError: the file cannot be opened.
    """
    return load_map(Path(path))


def read_records(path: Path | str) -> Iterator[Read]:
    """Every examination of a JSON, NDJSON, CSV, Excel or HL7 v2 file, one by one.

    What cannot be read comes out in its place as `Rejected`, with line and reason.

    Raises:
        OSError: the file cannot be opened.
    """
    return open_records(Path(path))


def process(
    record: LocalRecord | Mapping[str, Any] | bytes | str,
    template_map: TemplateMap | Path | str,
    edition: Edition = "R4",
    *,
    recorded: datetime | None = None,
    snomed: bool = True,
    earlier: dict[str, Any] | None = None,
) -> Result:
    """One examination, coded and checked.

    Args:
        record: a LocalRecord, a JSON object, or its text.
        template_map: the map, or the path of its file.
        edition: "R4", "R4B" or "R5".
        recorded: the moment of conversion, with a zone; now when left out.
        snomed: write SNOMED CT codings; without them our own code system carries the meaning.
        earlier: the Bundle that this examination gave before, when it is sent again.

    Raises:
        MapError: the map has faults.
        OSError: the map's file cannot be opened.
    """
    template = template_map if isinstance(template_map, TemplateMap) else read_map(template_map)
    one, issues = _one(record)
    if one is None:
        return Result(None, None, issues)
    moment = recorded or datetime.now(tz=UTC)
    return run(one, template, recorded=moment, edition=edition, snomed=snomed, earlier=earlier)


def review(
    exam: Exam, context: Context | Mapping[str, Any] | Sequence[Any], now: datetime | None = None
) -> Review:
    """An examination held against the chart: what each finding needs, and what does not go together.

    Supports clinical judgement and does not replace it; that nothing is raised is no reassurance.

    Args:
        exam: today's examination (`Result.exam`).
        context: the same patient's chart: FHIR resources (a Bundle, a list, a CDS Hooks prefetch), or what
            `fhirgallop.chart` read of them.
        now: the moment of the review, with a zone; this moment when left out. A Context has its own.

    Raises:
        ValueError: the chart is known to be another patient's.
    """
    if not isinstance(context, Context):
        context = read_chart(context, exam, now or datetime.now(tz=UTC)).context
    return conclude(exam, context)


def _one(
    record: LocalRecord | Mapping[str, Any] | bytes | str,
) -> tuple[LocalRecord | None, tuple[Issue, ...]]:
    if isinstance(record, LocalRecord):
        return record, ()
    if isinstance(record, Mapping):
        form = record.get("resourceType") == "QuestionnaireResponse"
        reading = read_response(record) if form else read_json(record)
        read: list[Read] = [*reading.stream()]
    else:
        text = record.encode() if isinstance(record, str) else record
        read = [*open_records(text, content_type="application/json")]
    if len(read) > 1:
        several = "These are several examinations; use read_records, or send them one by one."
        return None, (Issue("error", "structure", "record-several", several),)
    for one in read:
        if isinstance(one, LocalRecord):
            return one, ()
        if has_errors(one.issues):
            return None, one.issues
    none = Issue("error", "required", "record-none", "There is no examination here; send one.")
    return None, (none, *(issue for one in read for issue in one.issues))
