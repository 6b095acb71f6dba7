"""Measures a zipped spreadsheet before a parser may lay it out in memory.

A sheet of two cells, the second at the far corner, makes a parser reserve gigabytes; a part of a zip file may
unfold without end. So each part is unpacked under a limit, read once as a stream, and only what was measured
is handed on. On the way the cells are noted whose value a parser would silently leave blank.

Sources: ECMA-376 part 1, 18.3.1.4 (c) and 18.3.1.73 (row); OASIS OpenDocument 1.3 part 3, chapter 9 (tables).
"""

from __future__ import annotations

import io
import zipfile
import zlib
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Final, NamedTuple, Protocol
from xml.parsers import expat

from fhirgallop.intake.limits import Limits

_CHUNK: Final = 64 * 1024
_MOST_PARTS: Final = 2_000
_WORKBOOK: Final = "xl/workbook.xml"
_RELATIONS: Final = "xl/_rels/workbook.xml.rels"
_ODS_PARTS: Final = ("mimetype", "META-INF/manifest.xml", "content.xml")
_ODS_QUIET: Final = ("style-name", "number-columns-repeated", "content-validation-name")
_TOO_WIDE: Final = (
    "A sheet spans more than {:,} cells; delete stray entries far from the table, or save it as CSV."
)

Area = tuple[int, int, int, int]


class Fault(NamedTuple):
    """Why a file is refused: issue rule, and what is wrong with its cure."""

    rule: str
    text: str


@dataclass(frozen=True, slots=True)
class Measured:
    """A spreadsheet file found harmless.

    Attributes:
        package: the file again, with no parts but those that were measured.
        unusable: sheet name -> row from 1 -> columns from 1 of cells that hold an error or no result.
        merged: sheet name -> merged areas (first row, first column, last row, last column; from 1).
    """

    package: bytes
    unusable: Mapping[str, Mapping[int, list[int]]]
    merged: Mapping[str, list[Area]]


class _FaultError(Exception):
    def __init__(self, rule: str, text: str) -> None:
        self.fault = Fault(rule, text)
        super().__init__(rule)


@dataclass(slots=True)
class _Notes:
    """What was seen in one sheet."""

    unusable: dict[int, list[int]] = field(default_factory=dict)
    merged: list[Area] = field(default_factory=list)


def measured(data: bytes, limits: Limits) -> Measured | Fault:
    """The spreadsheet in `data` made safe to lay out, or the rule and text of why it is not."""
    try:
        with zipfile.ZipFile(io.BytesIO(data)) as package:
            return _measured(package, limits)
    except _FaultError as error:
        return error.fault
    except expat.ExpatError:
        return Fault("sheet-unreadable", "A part of the file is damaged; save it anew, or as CSV in UTF-8.")
    except (zipfile.BadZipFile, zlib.error, RuntimeError, NotImplementedError, OSError, ValueError, EOFError):
        return Fault("sheet-unreadable", "The file is damaged or has a password; save it anew without one.")


def _measured(package: zipfile.ZipFile, limits: Limits) -> Measured:
    names = package.namelist()
    if len(names) > _MOST_PARTS:
        raise _FaultError("sheet-too-large", f"The file has more than {_MOST_PARTS:,} parts; save it as CSV.")
    excel = _WORKBOOK in names
    if not excel and "content.xml" not in names:
        raise _FaultError("sheet-unreadable", "This is no .xlsx or .ods file; save the table as one of them.")
    kept = (
        [name for name in names if name.lower().endswith((".xml", ".rels"))]
        if excel
        else [name for name in _ODS_PARTS if name in names]
    )
    sheets: dict[str, _Notes] = {}
    index = _Index()
    made = io.BytesIO()
    left = limits.unpacked_bytes
    with zipfile.ZipFile(made, "w", zipfile.ZIP_STORED) as copy:
        for name in dict.fromkeys(kept):
            content = _unpacked(package, name, left)
            left -= len(content)
            if name != "mimetype":
                watcher = _watcher(name, excel, limits, sheets, index)
                _read(content, watcher)
            copy.writestr(name, content)
    named = sheets
    if excel:
        named = {sheet: sheets[part] for sheet, part in index.parts().items() if part in sheets}
    return Measured(
        made.getvalue(),
        {sheet: notes.unusable for sheet, notes in named.items()},
        {sheet: notes.merged for sheet, notes in named.items()},
    )


def _unpacked(package: zipfile.ZipFile, name: str, most: int) -> bytes:
    parts = []
    with package.open(name) as stream:
        while chunk := stream.read(_CHUNK):
            most -= len(chunk)
            if most < 0:
                text = "The file unfolds to more than it may; save the table as CSV in UTF-8."
                raise _FaultError("sheet-too-large", text)
            parts.append(chunk)
    return b"".join(parts)


class _Watcher(Protocol):
    def start(self, name: str, attributes: dict[str, str]) -> None: ...
    def end(self, name: str) -> None: ...
    def text(self, data: str) -> None: ...


def _watcher(name: str, excel: bool, limits: Limits, sheets: dict[str, _Notes], index: _Index) -> _Watcher:
    if not excel:
        return _OpenDocument(limits.cells, sheets)
    if name in (_WORKBOOK, _RELATIONS):
        return index
    return _SpreadsheetML(limits.cells, sheets.setdefault(name, _Notes()))


def _read(content: bytes, watcher: _Watcher) -> None:
    parser = expat.ParserCreate()
    parser.buffer_text = True

    def start(name: str, attributes: dict[str, str]) -> None:
        watcher.start(name.rpartition(":")[2], attributes)

    def end(name: str) -> None:
        watcher.end(name.rpartition(":")[2])

    def document_type(*_: object) -> None:
        raise _FaultError("sheet-unreadable", "A part of the file declares a document type; save it anew.")

    parser.StartElementHandler = start
    parser.EndElementHandler = end
    parser.CharacterDataHandler = watcher.text
    parser.StartDoctypeDeclHandler = document_type
    parser.Parse(content, True)


class _Index:
    """Names of the sheets and the parts that hold them."""

    def __init__(self) -> None:
        self._ids: dict[str, str] = {}
        self._targets: dict[str, str] = {}

    def start(self, name: str, attributes: dict[str, str]) -> None:
        if name == "sheet":
            relation = next((v for k, v in attributes.items() if k.endswith(":id")), "")
            self._ids[attributes.get("name", "")] = relation
        elif name == "Relationship":
            self._targets[attributes.get("Id", "")] = attributes.get("Target", "")

    def end(self, name: str) -> None:
        """Nothing ends here."""

    def text(self, data: str) -> None:
        """No text matters here."""

    def parts(self) -> dict[str, str]:
        """Sheet name -> name of its part in the package."""
        targets = {key: t.lstrip("/") if t.startswith("/") else f"xl/{t}" for key, t in self._targets.items()}
        return {name: targets[key] for name, key in self._ids.items() if key in targets}


class _Extent:
    """The box of rows and columns in use; its size is limited."""

    def __init__(self, most: int) -> None:
        self._most = most
        self._row = 0
        self._column = 0

    def reach(self, row: int, column: int) -> None:
        """A cell is there."""
        self._row = max(self._row, row)
        self._column = max(self._column, column)
        if self._row * self._column > self._most:
            raise _FaultError("sheet-too-large", _TOO_WIDE.format(self._most))


class _SpreadsheetML:
    """One part of an .xlsx file; parts that are no sheets hold no cells and pass."""

    def __init__(self, most: int, notes: _Notes) -> None:
        self._extent = _Extent(most)
        self._notes = notes
        self._row = self._column = 0
        self._type = ""
        self._formula = self._in_value = self._valued = False

    def start(self, name: str, attributes: dict[str, str]) -> None:
        if name == "row":
            self._row = _number(attributes["r"]) if "r" in attributes else self._row + 1
            self._column = 0
            self._extent.reach(self._row, 1)
        elif name == "c":
            if "r" in attributes:
                self._row, self._column = _cell(attributes["r"])
            else:
                self._column += 1
            self._extent.reach(self._row, self._column)
            self._type = attributes.get("t", "")
            self._formula = self._valued = False
        elif name == "f":
            self._formula = True
        elif name == "v":
            self._in_value = True
        elif name == "mergeCell":
            first, _, last = attributes.get("ref", "").partition(":")
            self._notes.merged.append((*_cell(first), *_cell(last or first)))

    def text(self, data: str) -> None:
        if self._in_value and data:
            self._valued = True

    def end(self, name: str) -> None:
        if name == "v":
            self._in_value = False
        elif name == "c" and (
            self._type == "e" or (self._formula and not self._valued and self._type != "str")
        ):
            self._notes.unusable.setdefault(self._row, []).append(self._column)


class _OpenDocument:
    """content.xml of an .ods file; what is empty at the end of rows and tables does not count."""

    def __init__(self, most: int, sheets: dict[str, _Notes]) -> None:
        self._most = most
        self._sheets = sheets
        self._notes = _Notes()
        self._extent = _Extent(most)
        self._row = self._rows = self._column = self._columns = 0
        self._in_cell = False

    def start(self, name: str, attributes: dict[str, str]) -> None:
        plain = {key.rpartition(":")[2]: value for key, value in attributes.items()}
        if name == "table":
            self._notes = self._sheets.setdefault(plain.get("name", ""), _Notes())
            self._extent = _Extent(self._most)
            self._row = self._rows = 0
        elif name == "table-row":
            self._row += self._rows
            self._rows = _number(plain.get("number-rows-repeated", "1"))
            self._column = self._columns = 0
        elif name in ("table-cell", "covered-table-cell"):
            self._column += self._columns
            self._columns = _number(plain.get("number-columns-repeated", "1"))
            self._in_cell = True
            if any(key not in _ODS_QUIET for key in plain):
                self._filled()
            row, column = self._row + 1, self._column + 1
            if "error" in (value for key, value in attributes.items() if key.endswith(":value-type")):
                self._notes.unusable.setdefault(row, []).append(column)
            down = _number(plain.get("number-rows-spanned", "1"))
            right = _number(plain.get("number-columns-spanned", "1"))
            if down > 1 or right > 1:
                self._notes.merged.append((row, column, row + down - 1, column + right - 1))

    def text(self, data: str) -> None:
        if self._in_cell and not data.isspace():
            self._filled()

    def end(self, name: str) -> None:
        if name in ("table-cell", "covered-table-cell"):
            self._in_cell = False

    def _filled(self) -> None:
        self._extent.reach(self._row + self._rows, self._column + self._columns)


def _number(text: str) -> int:
    if not (text.isascii() and text.isdecimal() and len(text) <= 8):
        raise _FaultError(
            "sheet-unreadable", "A row or cell of the file has an impossible place; save it anew."
        )
    return int(text)


def _cell(reference: str) -> tuple[int, int]:
    """Row and column from 1 of a reference such as `AB12`."""
    letters = reference.rstrip("0123456789")
    if not (letters.isascii() and letters.isalpha() and len(letters) <= 3):
        raise _FaultError("sheet-unreadable", "A cell of the file has an impossible place; save it anew.")
    column = 0
    for letter in letters.upper():
        column = column * 26 + ord(letter) - ord("A") + 1
    return _number(reference[len(letters) :]), column
