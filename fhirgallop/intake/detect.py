"""Which reader a file or a request's body is for, by its content type or the ending of its name."""

from __future__ import annotations

import codecs
import io
from collections.abc import Iterator, Mapping
from dataclasses import replace
from pathlib import Path
from typing import Any, BinaryIO, Final, Literal

from fhirgallop.codes import fhirjson
from fhirgallop.intake.hl7v2 import read_hl7
from fhirgallop.intake.limits import DEFAULT, Limits
from fhirgallop.intake.midway import START, Midway
from fhirgallop.intake.questionnaire import read_response
from fhirgallop.intake.reading import Read, Reading, refused, remarked
from fhirgallop.intake.record import LocalRecord
from fhirgallop.intake.repeats import flag_repeats
from fhirgallop.intake.rest import Convert, read_ndjson, records_of
from fhirgallop.intake.table import read_csv
from fhirgallop.intake.workbook import read_workbook
from fhirgallop.outcome import Issue, has_errors

Kind = Literal["json", "ndjson", "csv", "tsv", "workbook", "hl7"]

BY_ENDING: Final[Mapping[str, Kind]] = {
    ".json": "json",
    ".ndjson": "ndjson",
    ".jsonl": "ndjson",
    ".csv": "csv",
    ".txt": "csv",
    ".tsv": "tsv",
    ".xlsx": "workbook",
    ".xls": "workbook",
    ".ods": "workbook",
    ".hl7": "hl7",
}
BY_CONTENT_TYPE: Final[Mapping[str, Kind]] = {
    "application/json": "json",
    "application/fhir+json": "json",
    "application/x-ndjson": "ndjson",
    "application/fhir+ndjson": "ndjson",
    "text/csv": "csv",
    "text/tab-separated-values": "tsv",
    "application/vnd.openxmlformats-officedocument.spreadsheetml.sheet": "workbook",
    "application/vnd.oasis.opendocument.spreadsheet": "workbook",
    "application/vnd.ms-excel": "workbook",
    "application/hl7-v2": "hl7",
    "application/hl7-v2+er7": "hl7",
    "x-application/hl7-v2+er7": "hl7",
}


def kind_of(*, content_type: str = "", name: str = "") -> Kind | None:
    """The kind of input by its content type, where one is given, else by the ending of its name."""
    if content_type:
        return BY_CONTENT_TYPE.get(content_type.partition(";")[0].strip().lower())
    return BY_ENDING.get(Path(name).suffix.lower())


def open_records(
    content: Path | bytes | BinaryIO,
    *,
    content_type: str = "",
    name: str = "",
    sheet: str = "",
    questionnaire: Mapping[str, Any] | None = None,
    limits: Limits = DEFAULT,
    since: Midway | None = None,
) -> Iterator[Read]:
    """Every record of a file, a body or a stream, with a warning on one that comes twice.

    Args:
        content: a path, bytes, or a stream opened for bytes.
        content_type: media type, where there is one; it goes before the ending of the name.
        name: file name, for its ending and for issues; that of the path by default.
        sheet: name of the sheet to read of a spreadsheet.
        questionnaire: the form that QuestionnaireResponses are judged by.
        limits: bounds.
        since: the place in the file that a stream starts at, where the file is read in parts
            (`fhirgallop.intake.cutting`); what comes twice is then for whoever sees all of them.

    Raises:
        OSError: the path cannot be opened.
    """
    name = name or (content.name if isinstance(content, Path) else "")
    kind = kind_of(content_type=content_type, name=name)
    if kind is None:
        known = ", ".join(BY_CONTENT_TYPE if content_type else BY_ENDING)
        text = f"This kind of input is not known; accepted are {known}."
        yield refused(name, 0, "fatal", "input-unknown-type", text)
        return
    stream = content.open("rb") if isinstance(content, Path) else content
    stream = io.BytesIO(stream) if isinstance(stream, bytes) else stream
    try:
        reads = _read(kind, stream, name, sheet, questionnaire, limits, since or START)
        yield from reads if since else flag_repeats(reads, limits=limits)
    finally:
        if isinstance(content, Path):
            stream.close()


def _each(values: list[Any], name: str, limits: Limits, convert: Convert) -> Iterator[Read]:
    """One read a place of a list, in order; what is refused names its place."""
    for place, value in enumerate(values):
        if isinstance(value, list):
            text = "This place of the list holds another list; put each record into it directly."
            fault = Issue("error", "structure", "json-not-a-record", text, source=name)
            reading = Reading(issues=(fault,))
        else:
            reading = convert(value, name, limits)
        for read in reading.stream(name):
            at = f"[{place}]"
            if isinstance(read, LocalRecord):
                yield replace(read, source=f"{name}{at}") if name else read
            else:
                named = (replace(i, field=f"{at}.{i.field}" if i.field else at) for i in read.issues)
                yield replace(read, issues=tuple(named))


def _whole_json(stream: BinaryIO, limits: Limits) -> tuple[bytes, int]:
    """A JSON text and how large it may be: a list holds many records."""
    text = stream.read(limits.record_bytes + 1)
    if not text.removeprefix(codecs.BOM_UTF8).lstrip().startswith(b"["):
        return text, limits.record_bytes
    return text + stream.read(limits.list_bytes + 1 - len(text)), limits.list_bytes


def _read(
    kind: Kind,
    stream: BinaryIO,
    name: str,
    sheet: str,
    questionnaire: Mapping[str, Any] | None,
    limits: Limits,
    since: Midway,
) -> Iterator[Read]:
    def convert(value: Any, source: str, bounds: Limits) -> Reading:
        if isinstance(value, Mapping) and isinstance(value.get("resourceType"), str):
            return read_response(value, questionnaire=questionnaire, source=source, limits=bounds)
        return records_of(value, source, bounds)

    match kind:
        case "json":
            text, largest = _whole_json(stream, limits)
            value, issues = fhirjson.read(text, max_bytes=largest, source=name)
            if has_errors(issues):
                return Reading(issues=tuple(issues)).stream(name)
            if isinstance(value, list) and value:
                return remarked(issues, _each(value, name, limits, convert), name)
            return remarked(issues, convert(value, name, limits).stream(name), name)
        case "ndjson":
            return read_ndjson(stream, source=name, limits=limits, convert=convert, since=since)
        case "csv":
            return read_csv(stream, source=name, limits=limits, since=since)
        case "tsv":
            return read_csv(stream, delimiter="\t", source=name, limits=limits, since=since)
        case "workbook":
            return read_workbook(stream, sheet=sheet, source=name, limits=limits)
        case "hl7":
            return read_hl7(stream, source=name, limits=limits, since=since)
