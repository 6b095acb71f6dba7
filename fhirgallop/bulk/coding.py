"""One record of many: coded by the pipeline, and written as the lines that leave.

The processes of one machine and the executors of a Spark cluster both call `code`, so that both give the same
bytes.
"""

from __future__ import annotations

import re
from collections.abc import Iterator
from dataclasses import dataclass, replace
from typing import Any, Final, Literal

import msgspec

from fhirgallop import pipeline
from fhirgallop.bulk.wish import Wish
from fhirgallop.codes import fhirjson
from fhirgallop.errors import MapError
from fhirgallop.exam.exam import Exam
from fhirgallop.intake.reading import Read
from fhirgallop.intake.record import LocalRecord
from fhirgallop.mapping.reading import read_map
from fhirgallop.mapping.template_map import TemplateMap
from fhirgallop.outcome import Issue, operation_outcome
from fhirgallop.pipeline import Result

Became = Literal["coded", "refused", "unreadable", "remark"]

OUTCOME: Final = "OperationOutcome"
ERRORS: Final = "errors"

_URN: Final = "urn:uuid:"
# Only a member's name stands between quotation marks and a colon: text that looks like it is escaped.
_REFERENCE: Final = re.compile(rb'"reference":"urn:uuid:([0-9a-f-]{36})"')
_BROKE: Final = Issue(
    "fatal", "exception", "record-broke",
    "Something broke at this record, which is a fault of the program; nothing of it was written. Report it.",
)  # fmt: skip


@dataclass(frozen=True, slots=True)
class ErrorRow:
    """Why something was not coded: a row of the error file."""

    file: str
    line: int
    field: str
    rule: str
    reason: str

    @classmethod
    def of(cls, issue: Issue) -> ErrorRow:
        """The row of one issue."""
        return cls(issue.source, issue.line, issue.field, issue.rule, issue.text)


@dataclass(frozen=True, slots=True)
class Coded:
    """What became of one record, or of a place where there should have been one.

    Attributes:
        became: coded; refused (an issue is an error); unreadable (no record could be read there); or a remark
            on the file that stands for no record.
        lines: resource type and JSON text of everything that is written for it.
        issues: all issues, each with its file and line.
        result: what the pipeline gave; None for what was not read as a record.
    """

    became: Became
    lines: tuple[tuple[str, bytes], ...]
    issues: tuple[Issue, ...]
    result: Result | None

    @property
    def exam(self) -> Exam | None:
        """The examination, where it was coded."""
        return self.result.exam if self.result and self.result.ok else None

    def written(self) -> Iterator[tuple[str, bytes]]:
        """Everything that is written for it, each a line of one kind: resources, outcome, errors."""
        yield from self.lines
        if self.issues:
            yield OUTCOME, fhirjson.write(operation_outcome(self.issues))
        for issue in self.issues:
            if issue.is_error:
                yield ERRORS, msgspec.json.encode(ErrorRow.of(issue))


def template_of(wish: Wish) -> TemplateMap:
    """The map of a run.

    Raises:
        MapError: the map has faults.
    """
    template, issues = read_map(wish.map_text, name=wish.map_name)
    if template is None:
        raise MapError(wish.map_name, issues)
    return template


def code(read: Read, template: TemplateMap, wish: Wish) -> Coded:
    """One record through the pipeline; never raises on what a record holds."""
    if not isinstance(read, LocalRecord):
        became: Became = "unreadable" if any(issue.is_error for issue in read.issues) else "remark"
        return Coded(became, (), tuple(_placed(issue, read) for issue in read.issues), None)
    try:
        result = pipeline.process(
            read, template, recorded=wish.recorded, edition=wish.edition, snomed=wish.snomed
        )
        lines = () if result.bundle is None else tuple(_lines(result.bundle, wish.bundles))
    except Exception:  # noqa: BLE001 - one record's fault is not to stop millions
        return Coded("refused", (), (_placed(_BROKE, read),), None)
    issues = tuple(_placed(issue, read) for issue in result.issues)
    return Coded("coded" if result.ok else "refused", lines, issues, result)


def _placed(issue: Issue, read: Read) -> Issue:
    return replace(issue, source=issue.source or read.source, line=issue.line or read.line)


def _lines(bundle: dict[str, Any], whole: bool) -> Iterator[tuple[str, bytes]]:
    """The Bundle as one line, or each resource with an id of its own and references by address.

    The id is the UUID of the full URL, so that an examination coded again is the same resources.
    """
    if whole:
        yield "Bundle", fhirjson.write(bundle)
        return
    types = {
        entry["fullUrl"][len(_URN) :].encode(): entry["resource"]["resourceType"].encode()
        for entry in bundle["entry"]
    }

    def address(found: re.Match[bytes]) -> bytes:
        kind = types.get(found[1])
        return found[0] if kind is None else b'"reference":"' + kind + b"/" + found[1] + b'"'

    for entry in bundle["entry"]:
        resource = entry["resource"]
        kind = resource["resourceType"]
        text = fhirjson.write({"resourceType": kind, "id": entry["fullUrl"][len(_URN) :], **resource})
        yield kind, _REFERENCE.sub(address, text) if b'"reference":"urn:uuid:' in text else text
