"""What is put together when all parts are done: manifest, error file, what comes twice, and the report.

Sources: HL7 Bulk Data Access 2.0 and 4.0.0-ballot (manifest of a kick-off's result and of `$bulk-submit`);
RFC 4180 (error file).
"""

from __future__ import annotations

import csv
import gzip
import io
from collections.abc import Iterator, Sequence
from dataclasses import astuple, fields
from itertools import chain
from pathlib import Path
from typing import IO, Any, Final, cast

import msgspec

from fhirgallop.bulk.coding import ERRORS, OUTCOME, ErrorRow
from fhirgallop.bulk.findings import FINDINGS
from fhirgallop.bulk.folder import Folder, whole, write_json
from fhirgallop.bulk.repeats import repeats
from fhirgallop.bulk.report import report
from fhirgallop.bulk.report_page import page
from fhirgallop.bulk.tally import Tally
from fhirgallop.bulk.wish import Source, Wish
from fhirgallop.codes import fhirjson
from fhirgallop.observations.bundle import instant
from fhirgallop.outcome import Issue, operation_outcome

MANIFEST: Final = "manifest.json"
ERROR_FILE: Final = "errors.csv"
REPEATS: Final = "repeats"
_NOT_FHIR: Final = (ERRORS, FINDINGS)
_FORMULA: Final = ("=", "+", "-", "@", "\t", "\r")


def finish(wish: Wish, inputs: Sequence[Source], out: Path, *, base: str = "") -> Tally:
    """Writes what concerns all parts, and gives the counts of the run.

    Args:
        wish: how records were coded.
        inputs: the files.
        out: the folder of the run.
        base: address under which the folder will be served, for the manifest; else addresses are relative.
    """
    folder = Folder(out)
    tally = Tally()
    for _, entry in folder.entries():
        tally.merge(Tally.read(entry.tally))
    found = _write_repeats(folder, inputs, tally)
    with whole(out / ERROR_FILE) as file:
        _write_errors(folder, file)
    with whole(out / MANIFEST) as file:
        _write_manifest(folder, file, wish, base, found)
    told = report(tally, wish)
    write_json(out / "report.json", told.as_dict())
    for name, text in (("report.txt", told.as_text()), ("report.html", page(told))):
        with whole(out / name) as file:
            file.write(text.encode("utf-8", "replace"))
    return tally


def _write_repeats(folder: Folder, inputs: Sequence[Source], tally: Tally) -> int:
    """OperationOutcomes of what comes twice; gives how many there are."""
    place = folder.path / OUTCOME
    place.mkdir(exist_ok=True)
    count = 0
    with whole(place / f"{REPEATS}.ndjson") as file:
        for repeat in repeats(folder.path):
            first = f"{inputs[repeat.first_file].path}, line {repeat.first_line}"
            words = "is the same as" if repeat.same else "has the number of"
            more = "" if repeat.same else "; its content differs"
            text = f"This examination {words} the one at {first}{more}; send each examination once."
            source = str(inputs[repeat.file].path)
            issue = Issue("warning", "duplicate", "record-repeated", text, source=source, line=repeat.line)
            file.write(fhirjson.write(operation_outcome([issue])) + b"\n")
            tally.repeats["same" if repeat.same else "differs",] += 1
            count += 1
    return count


def lines_of(folder: Folder, kind: str) -> Iterator[bytes]:
    """All lines of one kind, in the order of the input."""
    for _, entry in folder.entries():
        for where, name, _ in entry.files:
            if where == kind:
                with _opened(folder.path / where / name) as file:
                    yield from file


def _opened(path: Path) -> IO[bytes]:
    return cast("IO[bytes]", gzip.open(path)) if path.suffix == ".gz" else path.open("rb")


def _write_errors(folder: Folder, file: IO[bytes]) -> None:
    text = io.TextIOWrapper(file, "utf-8", newline="", write_through=True)
    writer = csv.writer(text)
    writer.writerow(field.name for field in fields(ErrorRow))
    for line in lines_of(folder, ERRORS):
        writer.writerow(_plain(cell) for cell in astuple(msgspec.json.decode(line, type=ErrorRow)))
    text.detach()


def _plain(cell: Any) -> Any:
    """Never a formula, where a spreadsheet program opens the file: names of fields are the sender's."""
    return f"'{cell}" if isinstance(cell, str) and cell.startswith(_FORMULA) else cell


def _write_manifest(folder: Folder, file: IO[bytes], wish: Wish, base: str, repeated: int) -> None:
    """Entry by entry, so that millions of parts take no more memory than one."""
    head = {
        "transactionTime": instant(wish.recorded),
        "request": f"{base}{MANIFEST}",
        "requiresAccessToken": False,
    }
    file.write(msgspec.json.encode(head)[:-1])
    file.write(b',"output":[\n')
    _write_items(file, _items(folder, base, outcome=False))
    file.write(b'\n],"outcome":[\n')
    extra = [_item(OUTCOME, f"{REPEATS}.ndjson", repeated, base)] if repeated else []
    _write_items(file, chain(_items(folder, base, outcome=True), extra))
    file.write(b"\n]}\n")


def _items(folder: Folder, base: str, *, outcome: bool) -> Iterator[dict[str, Any]]:
    for _, entry in folder.entries():
        for kind, name, count in entry.files:
            if kind not in _NOT_FHIR and (kind == OUTCOME) == outcome:
                yield _item(kind, name, count, base)


def _item(kind: str, name: str, count: int, base: str) -> dict[str, Any]:
    return {"type": kind, "url": f"{base}{kind}/{name}", "count": count}


def _write_items(file: IO[bytes], items: Iterator[dict[str, Any]]) -> None:
    between = b""
    for item in items:
        file.write(between + msgspec.json.encode(item))
        between = b",\n"
