"""Spreadsheets: .xlsx and .ods through python-calamine, once the file has been measured.

Sources: ECMA-376 part 1 (SpreadsheetML: cells, types, merged cells); OASIS OpenDocument 1.3 part 3 (tables).
The older .xls is refused: a few of its bytes can ask for more memory than any machine has.
"""

from __future__ import annotations

import io
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import replace
from datetime import date, datetime, time, timedelta
from decimal import Decimal
from typing import Any, BinaryIO, Final

from python_calamine import CalamineSheet, CalamineWorkbook

from fhirgallop.intake.limits import DEFAULT, Limits
from fhirgallop.intake.measuring import Area, Fault, Measured, measured
from fhirgallop.intake.reading import Read, Rejected, refused
from fhirgallop.intake.record import Value
from fhirgallop.intake.table import read_rows
from fhirgallop.outcome import Issue

_OLE: Final = b"\xd0\xcf\x11\xe0"
_ZIP: Final = b"PK\x03\x04"
_BROKEN: Final = Fault("sheet-unreadable", "The file cannot be read; save it anew, or as CSV in UTF-8.")
_MOST_MERGES: Final = 50


def read_workbook(
    stream: BinaryIO, *, sheet: str = "", source: str = "", limits: Limits = DEFAULT
) -> Iterator[Read]:
    """Every row of one sheet as a record.

    Numbers come as exact decimals with the 15 digits that a spreadsheet keeps, numbers stored as text stay
    text, dates come as ISO 8601 text. Of merged cells the first has the value and the others are blank, which
    is said. A cell that holds an error, or a formula that was never calculated, rejects its row.

    Args:
        stream: opened for bytes.
        sheet: name of the sheet; the first that is not empty by default.
        source: file name, for issues.
        limits: bounds.
    """
    data = stream.read(limits.workbook_bytes + 1)
    found = _refusal(data, limits) or measured(data, limits)
    if isinstance(found, Fault):
        yield refused(source, 0, "fatal", found.rule, found.text)
    else:
        yield from _sheet(found, sheet, source, limits)


def _refusal(data: bytes, limits: Limits) -> Fault | None:
    if len(data) > limits.workbook_bytes:
        text = f"The file is larger than {limits.workbook_bytes:,} bytes; save the table as CSV in UTF-8."
        return Fault("sheet-too-large", text)
    if data.startswith(_OLE):
        text = "This is an old .xls file, or one with a password; save it as .xlsx without a password."
        return Fault("sheet-old-format", text)
    if not data.startswith(_ZIP):
        text = "This is no .xlsx or .ods file; save the table as one, or as CSV in UTF-8."
        return Fault("sheet-unreadable", text)
    return None


def _sheet(found: Measured, name: str, source: str, limits: Limits) -> Iterator[Read]:
    opened = _opened(found.package, name)
    if isinstance(opened, Fault):
        yield refused(source, 0, "fatal", opened.rule, opened.text)
        return
    sheet, names = opened
    remarks: list[Issue] = []
    others = [other for other in names if other != sheet.name]
    if others:
        text = f"Only the sheet {sheet.name!r} is read; not read: {', '.join(map(repr, others[:20]))}."
        remarks.append(Issue("information", "informational", "sheet-others", text, source=source))
    rows = _rows(sheet, found.unusable.get(sheet.name, {}), source)
    reads = read_rows(rows, source=source, limits=limits, prefix="sheet", remarks=remarks)
    yield from _with_merges(reads, found.merged.get(sheet.name, []), source)


def _opened(package: bytes, name: str) -> tuple[CalamineSheet, list[str]] | Fault:
    """The sheet of that name, or the first with a cell in it, and the names of all."""
    try:
        book = CalamineWorkbook.from_filelike(io.BytesIO(package))
        names = book.sheet_names
        if name and name not in names:
            known = ", ".join(map(repr, names[:20]))
            return Fault("sheet-unknown", f"There is no sheet {name!r}; the sheets are {known}.")
        sheet = None
        for candidate in [name] if name else names:
            sheet = book.get_sheet_by_name(candidate)
            if sheet.height:
                break
    except Exception:  # noqa: BLE001  the parser of a foreign format may raise anything
        return _BROKEN
    except BaseException as error:
        if type(error).__name__ != "PanicException":  # how a failed assertion inside the parser shows
            raise
        return _BROKEN
    return (sheet, names) if sheet else Fault("sheet-unreadable", "The workbook holds no sheet.")


def _rows(
    sheet: CalamineSheet, unusable: Mapping[int, Sequence[int]], source: str
) -> Iterator[tuple[int, list[Value] | Rejected]]:
    for line, row in enumerate(sheet.iter_rows(), start=1):
        if line in unusable:
            cells = ", ".join(f"{_letters(column)}{line}" for column in unusable[line][:20])
            text = (
                f"These cells hold an error, or a formula that was never calculated: {cells}. Correct them."
            )
            yield line, refused(source, line, "error", "sheet-unusable-cell", text)
        else:
            yield line, [_value(cell) for cell in row]


def _value(cell: Any) -> Value:
    """A cell's value; a date or a time as ISO 8601 text."""
    match cell:
        case bool() | str():
            return cell
        case int() | float():
            return Decimal(format(Decimal(format(cell, ".15g")), "f"))
        case datetime():
            return cell.isoformat(timespec="auto")
        case date() | time():
            return cell.isoformat()
        case timedelta():
            return f"PT{format(Decimal(format(cell.total_seconds(), '.15g')), 'f')}S"
        case _:
            return "" if cell is None else str(cell)


def _with_merges(reads: Iterator[Read], merged: Sequence[Area], source: str) -> Iterator[Read]:
    """`reads`, each with a warning for the merged cells that its row is part of."""
    waiting = sorted(merged, reverse=True)
    active: list[Area] = []
    for read in reads:
        while waiting and waiting[-1][0] <= read.line:
            active.append(waiting.pop())
        active = [area for area in active if area[2] >= read.line][:_MOST_MERGES]
        issues = [_merge_issue(area, read.line, source) for area in active]
        yield replace(read, issues=(*read.issues, *issues)) if issues else read


def _merge_issue(area: Area, line: int, source: str) -> Issue:
    top, left, bottom, right = area
    text = (
        f"The cells {_letters(left)}{top}:{_letters(right)}{bottom} are merged: only the first of them has "
        "the value, the others are blank. Unmerge them and fill in each row."
    )
    return Issue("warning", "structure", "sheet-merged-cells", text, source=source, line=line)


def _letters(column: int) -> str:
    """A column from 1 as a spreadsheet names it: A, Z, AA ..."""
    name = ""
    while column:
        column, digit = divmod(column - 1, 26)
        name = chr(ord("A") + digit) + name
    return name
