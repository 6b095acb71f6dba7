"""Tables: one row is one examination, the header names the fields.

Sources: RFC 4180 (CSV: quoting, line ends); Unicode 15 section 2.6 and Windows-1252 for encodings. Other
separators than the comma, and the line `sep=;`, are common practice of spreadsheet programs.
"""

from __future__ import annotations

import csv
from collections.abc import Iterator, Sequence
from dataclasses import replace
from typing import BinaryIO, Final

from fhirgallop.intake.limits import DEFAULT, Limits
from fhirgallop.intake.lines import spans
from fhirgallop.intake.midway import START, Midway
from fhirgallop.intake.reading import Read, Rejected, refused
from fhirgallop.intake.record import Field, LocalRecord, Value
from fhirgallop.outcome import Issue, Severity, has_errors

DELIMITERS: Final = ",;\t|"
_BOM: Final = b"\xef\xbb\xbf"
_WIDE_BOMS: Final = (b"\xff\xfe", b"\xfe\xff")


def read_csv(
    stream: BinaryIO,
    *,
    delimiter: str = "",
    source: str = "",
    limits: Limits = DEFAULT,
    since: Midway = START,
) -> Iterator[Read]:
    """Every row of a delimited text as a record; a bad row is rejected and the next one is read.

    Args:
        stream: opened for bytes; UTF-8, or Windows-1252 with a warning.
        delimiter: one of comma, semicolon, tab, bar; by default the one that the header holds most often.
        source: file name, for issues.
        limits: bounds.
        since: the place in the file that the stream starts at, as `cuts_of_csv` gave it.
    """
    text = _Text(stream, limits, source, since)
    try:
        delimiter = since.delimiter or _begin(text, delimiter)
    except _RefusedError as refusal:
        yield refusal.rejected
        return
    rows = _rows(text, delimiter)
    yield from read_rows(
        rows, source=source, limits=limits, prefix="csv", remarks=text.remarks, names=since.names
    )


def cuts_of_csv(
    stream: BinaryIO, each: int, *, delimiter: str = "", limits: Limits = DEFAULT
) -> Iterator[Midway]:
    """The places after every `each` rows of a table, from which `read_csv` can go on.

    Read from one place to the next, all parts together give what the whole gives. The first part is longer
    where its first rows cannot be read, so that it has one.
    """
    text, table = _Text(stream, limits, "", START), _Table("", limits, "csv")
    try:
        delimiter = _begin(text, delimiter)
    except _RefusedError:
        return
    count, place, some = 0, START, False
    for line, row in _rows(text, delimiter):
        if not isinstance(row, Rejected):
            if all(_is_blank(cell) for cell in row):
                continue
            if not table.names:
                if has_errors(table.header(row, line)):
                    return
                continue
        if count >= each and some:
            yield place
            count = 0
        count += 1
        some = some or not isinstance(row, Rejected)
        if count >= each:
            place = text.midway(table.names, delimiter)


def read_rows(
    rows: Iterator[tuple[int, list[Value] | Rejected]],
    *,
    source: str,
    limits: Limits,
    prefix: str,
    remarks: list[Issue],
    names: tuple[str, ...] = (),
) -> Iterator[Read]:
    """Records of numbered rows, the first non-empty one being the header where no `names` are known.

    `prefix` starts the issue rules. `remarks` is a list that may grow while rows are read: what concerns the
    whole file goes with the next record that comes out.
    """
    table = _Table(source, limits, prefix)
    table.names = names
    records = 0
    for line, row in rows:
        if isinstance(row, Rejected):
            read: Read = row
        elif all(_is_blank(cell) for cell in row):
            continue
        elif not table.names:
            remarks.extend(table.header(row, line))
            if has_errors(remarks):
                break
            continue
        else:
            records += 1
            if records > limits.rows:
                text = f"The table has more than {limits.rows:,} rows; send it in parts."
                yield refused(source, line, "fatal", "file-too-many-rows", text)
                return
            read = table.record(row, line)
        if remarks and isinstance(read, LocalRecord):
            read = replace(read, issues=(*remarks, *read.issues))
            remarks.clear()
        yield read
    if not records and not names and not has_errors(remarks):
        text = "The table has no row below its header." if table.names else "The table is empty."
        remarks.append(Issue("warning", "not-found", f"{prefix}-no-record", text, source=source))
    if remarks:
        yield Rejected(remarks[0].line, tuple(remarks), source)


class _Table:
    """What all rows of one table share: names of its columns (empty for one without), file, bounds."""

    def __init__(self, source: str, limits: Limits, prefix: str) -> None:
        self.names: tuple[str, ...] = ()
        self.source = source
        self._limits = limits
        self._prefix = prefix

    def header(self, row: Sequence[Value], line: int) -> list[Issue]:
        """Takes the names from the header row; returns what is wrong with them."""
        issues: list[Issue] = []
        names: list[str] = []
        seen: dict[str, int] = {}
        for cell in row:
            name = "" if _is_blank(cell) else " ".join(str(cell).split())
            if len(name) > self._limits.name:
                text = f"A header is longer than {self._limits.name} characters; is the first row the header?"
                issues.append(self._issue("error", "too-long", "header-too-long", text, line))
                name = ""
            if name in seen:
                seen[name] += 1
                again = f"{name}[{seen[name]}]"
                text = (
                    f"This header occurs again; the repeat is read as {again!r}. Rename one of the columns."
                )
                issues.append(self._issue("warning", "duplicate", "header-twice", text, line, name))
                name = again
            elif name:
                seen[name] = 0
            names.append(name)
        if len(names) > self._limits.fields:
            text = f"The table has more than {self._limits.fields:,} columns; send only those of the form."
            issues.append(self._issue("error", "too-long", "too-many-columns", text, line))
        self.names = tuple(names)
        return issues

    def record(self, row: Sequence[Value], line: int) -> Read:
        """The record of one row, or why there is none."""
        width = len(self.names)
        extra = len(row) > width and any(not _is_blank(cell) for cell in row[width:])
        if extra or len(row) < width:
            text = (
                f"The row has {len(row):,} cells and the header {width:,}; put text that holds the "
                "separator, such as a decimal comma, in quotation marks, and keep empty cells."
            )
            return refused(self.source, line, "error", f"{self._prefix}-ragged-row", text)
        fields: dict[str, Field] = {}
        issues: list[Issue] = []
        for place, name in enumerate(self.names):
            cell = row[place]
            blank = _is_blank(cell)
            if not name:
                if blank:
                    continue
                name = f"column {place + 1}"  # noqa: PLW2901
                text = "This column has a value and no header; name the column."
                issues.append(self._issue("warning", "structure", "no-header", text, line, name))
            if isinstance(cell, str) and len(cell) > self._limits.text:
                text = f"The cell has over {self._limits.text:,} characters; is a quotation mark left open?"
                issues.append(self._issue("error", "too-long", "cell-too-long", text, line, name))
            fields[name] = Field(name, () if blank else (cell,), line)
        if has_errors(issues):
            return Rejected(line, tuple(issues), self.source)
        return LocalRecord("table", fields, source=self.source, line=line, issues=tuple(issues))

    def _issue(self, severity: Severity, code: str, rule: str, text: str, line: int, name: str = "") -> Issue:
        return Issue(
            severity, code, f"{self._prefix}-{rule}", text, field=name, source=self.source, line=line
        )


def _is_blank(cell: Value) -> bool:
    return isinstance(cell, str) and (not cell or cell.isspace())


class _RefusedError(Exception):
    """Carries a refusal out of the iterator that feeds the CSV parser."""

    def __init__(self, rejected: Rejected) -> None:
        self.rejected = rejected
        super().__init__()


class _Text(Iterator[str]):
    """Lines of a byte stream as text: UTF-8, or Windows-1252 from the first line that is not UTF-8."""

    def __init__(self, stream: BinaryIO, limits: Limits, source: str, since: Midway) -> None:
        self._lines = spans(stream, limits.record_bytes, since.line)
        self._limits = limits
        self.source = source
        self._encoding = since.encoding or "utf-8"
        self._seen_utf8 = since.encoding == "utf-8"
        self._returned = ""
        self._end = 0
        self.line = since.line - 1
        self.remarks: list[Issue] = []

    def push_back(self, line: str) -> None:
        """Gives a line back, to be read again."""
        self._returned = line

    def midway(self, names: tuple[str, ...], delimiter: str) -> Midway:
        """The place after the line read last."""
        encoding = "utf-8" if self._seen_utf8 else self._encoding.removeprefix("utf-8")
        return Midway(self._end, self.line + 1, 0, names, delimiter, encoding)

    @property
    def next_line(self) -> int:
        """Number of the line that comes next."""
        return self.line + (not self._returned)

    def __next__(self) -> str:
        if self._returned:
            line, self._returned = self._returned, ""
            return line
        self.line, data, self._end = next(self._lines)
        if data is None:
            raise self._refusal("csv-line-too-long",
                                f"The line is longer than {self._limits.record_bytes:,} bytes; "
                                "is this a text table with one record a line?")  # fmt: skip
        if self.line == 1:
            data = self._without_mark(data)
        if data.isascii():
            if b"\0" in data:
                raise self._refusal("csv-binary", "The line holds zero bytes; this is no UTF-8 text table.")
            return data.decode("ascii")
        return self._decoded(data)

    def _without_mark(self, data: bytes) -> bytes:
        if data.startswith(_WIDE_BOMS):
            text = "The file is UTF-16; save it as CSV in UTF-8."
            raise _RefusedError(refused(self.source, 1, "fatal", "csv-utf16", text))
        if data.startswith(_BOM):
            text = "The file starts with a byte-order mark, as spreadsheet programs write it; it was skipped."
            self._remark("information", "csv-byte-order-mark", text)
            return data[len(_BOM) :]
        return data

    def _decoded(self, data: bytes) -> str:
        try:
            text = data.decode()
        except UnicodeDecodeError:
            return self._decoded_western(data)
        if self._encoding != "utf-8":
            words = "This line is UTF-8 and earlier ones are not; save the whole file as UTF-8."
            raise self._refusal("csv-mixed-encoding", words)
        self._seen_utf8 = True
        return text

    def _decoded_western(self, data: bytes) -> str:
        if self._seen_utf8:
            words = "This line is not UTF-8 and earlier ones are; save the whole file as UTF-8."
            raise self._refusal("csv-mixed-encoding", words)
        try:
            text = data.decode("cp1252")
        except UnicodeDecodeError:
            words = "This line is neither UTF-8 nor Windows-1252; save the file as UTF-8."
            raise self._refusal("csv-unknown-encoding", words) from None
        if self._encoding == "utf-8":
            self._encoding = "cp1252"
            words = (
                "The file is not UTF-8; it was read as Windows-1252 (Latin-1). Check accented letters, "
                "and save it as UTF-8."
            )
            self._remark("warning", "csv-not-utf8", words)
        return text

    def _remark(self, severity: Severity, rule: str, text: str) -> None:
        self.remarks.append(Issue(severity, "structure", rule, text, source=self.source, line=self.line))

    def _refusal(self, rule: str, text: str) -> _RefusedError:
        return _RefusedError(refused(self.source, self.line, "error", rule, text))


def _rows(text: _Text, delimiter: str) -> Iterator[tuple[int, list[Value] | Rejected]]:
    """Rows with the number of the line each starts on."""
    reader = csv.reader(text, delimiter=delimiter, strict=True)
    start = text.next_line
    while True:
        try:
            row = next(reader)
        except StopIteration:
            return
        except _RefusedError as refusal:
            yield text.line, refusal.rejected
        except csv.Error:
            lines = f" (lines {start} to {text.line})" if text.line > start else ""
            words = f"The row{lines} cannot be read; close each quotation mark, double those in quoted cells."
            yield start, refused(text.source, start, "error", "csv-quoting", words)
        else:
            yield start, list(row)
        start = text.line + 1


def _begin(text: _Text, delimiter: str) -> str:
    """Goes to the header; gives the delimiter, which a line `sep=;` or the header may tell.

    Raises:
        _RefusedError: a line before or of the header cannot be read.
    """
    first = _first_filled(text)
    if first.startswith("sep=") and len(first.rstrip("\r\n")) == 5 and first[4] in DELIMITERS:
        delimiter, first = first[4], _first_filled(text)
    text.push_back(first)
    return delimiter or _most_frequent(first)


def _first_filled(text: Iterator[str]) -> str:
    """The next line that is not blank; empty at the end."""
    return next((line for line in text if line.strip()), "")


def _most_frequent(header: str) -> str:
    """The delimiter that the header holds most often outside of quotation marks; the comma when none."""
    outside = "".join(header.split('"')[::2])
    return max(DELIMITERS, key=outside.count)
