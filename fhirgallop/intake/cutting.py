"""Cuts a file between its records, so that parts read at the same time give what the whole gives.

The file is read through once for it: only the reader of a table knows which line end stands inside quotation
marks. That costs a small part of what coding the records does.
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import BinaryIO

from fhirgallop.intake.detect import Kind
from fhirgallop.intake.hl7v2 import opens_message
from fhirgallop.intake.limits import DEFAULT, Limits
from fhirgallop.intake.lines import spans
from fhirgallop.intake.midway import Midway
from fhirgallop.intake.table import cuts_of_csv


def cuts(stream: BinaryIO, kind: Kind, each: int, limits: Limits = DEFAULT) -> Iterator[Midway]:
    """The places after every `each` records (NDJSON: lines) of a file; none where it can only be read whole.

    Args:
        stream: opened for bytes.
        kind: what the file holds.
        each: records between two places, at least 1.
        limits: the bounds that the parts will be read with.
    """
    match kind:
        case "csv":
            return cuts_of_csv(stream, each, limits=limits)
        case "tsv":
            return cuts_of_csv(stream, each, delimiter="\t", limits=limits)
        case "ndjson":
            return _cuts_of_lines(stream, each, limits)
        case "hl7":
            return _cuts_of_hl7(stream, each, limits)
        case "json" | "workbook":
            return iter(())


def _cuts_of_lines(stream: BinaryIO, each: int, limits: Limits) -> Iterator[Midway]:
    count = offset = 0
    for number, line, end in spans(stream, limits.record_bytes):
        if line is None or line.strip():
            if count == each:
                yield Midway(offset, number)
                count = 0
            count += 1
        offset = end


def _cuts_of_hl7(stream: BinaryIO, each: int, limits: Limits) -> Iterator[Midway]:
    count = total = offset = 0
    for number, line, end in spans(stream, limits.record_bytes):
        if line is not None and opens_message(line):
            if count == each:
                yield Midway(offset, number, total)
                count = 0
            count += 1
            total += 1
        offset = end
