"""Limits: how much of an input is read before it is refused. One place, handed in, never changed."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

KIBI: Final = 1024
MEBI: Final = 1024 * KIBI


@dataclass(frozen=True, slots=True)
class Limits:
    """Bounds of what intake accepts.

    Attributes:
        record_bytes: one JSON text, one NDJSON line, one row, one HL7 v2 message.
        list_bytes: one JSON list of many records, which has to be read whole.
        workbook_bytes: a spreadsheet file, which has to be read whole.
        unpacked_bytes: what the parts of a zipped spreadsheet may grow to.
        cells: rows times columns of a sheet.
        text: characters in one string, cell or answer.
        name: characters in the name of a field.
        depth: objects and arrays inside each other; groups inside each other.
        fields: entries of one record; columns of a table.
        rows: records of one file.
        remembered: records that are kept in mind to notice one that comes twice.
    """

    record_bytes: int = MEBI
    list_bytes: int = 32 * MEBI
    workbook_bytes: int = 32 * MEBI
    unpacked_bytes: int = 128 * MEBI
    cells: int = 5_000_000
    text: int = 64 * KIBI
    name: int = 256
    depth: int = 32
    fields: int = 2_000
    rows: int = 5_000_000
    remembered: int = 100_000


DEFAULT: Final = Limits()
