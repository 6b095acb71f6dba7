"""All that a database holds, in one file that any database of ours can be filled from.

A backup is gzip'd NDJSON. Its first line is an object (form, version of the tables, moment, rows by table);
then comes, for each table in the order of their references, an object with its name and columns and a line
for each row, a list with the values in the order of the columns (bytes as base64); the last line is an object
with the SHA-256 of all lines before it. It is one moment's state also while others write. SQLite and
PostgreSQL give the same file, so that it also moves a site from one to the other.
"""

from __future__ import annotations

import gzip
import hashlib
import json
import zlib
from base64 import b64decode, b64encode
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import IO, Any, Final

from sqlalchemy import Column, Connection, Engine, Table, func, insert, select
from sqlalchemy.exc import SQLAlchemyError

from fhirgallop.errors import BackupError
from fhirgallop.storage.engine import changing_tables, found_version, opening
from fhirgallop.storage.submissions import told
from fhirgallop.storage.tables import SCHEMA_VERSION, metadata, schema_version

_FORM: Final = 1
# a row may hold the body of a request, and so many are in memory at a time
_AT_ONCE: Final = 20
# a row holds a Bundle, or the body of a request, at most
_LONGEST_LINE: Final = 256 * 1024 * 1024
_TABLES: Final = tuple(table for table in metadata.sorted_tables if table is not schema_version)

# Is told the table and the number of rows done of it, now and then.
Progress = Callable[[str, int], None]


@dataclass(frozen=True, slots=True)
class Contents:
    """What a backup holds.

    Attributes:
        made: FHIR instant of its making.
        rows: number of rows by table.
    """

    made: str
    rows: Mapping[str, int]


def count(engine: Engine) -> Mapping[str, int]:
    """Rows by table, in the order of a backup.

    Raises:
        StorageError: the database failed.
    """
    with told(), engine.connect() as connection:
        return _count(connection)


def write_backup(engine: Engine, file: IO[bytes], *, made: str, progress: Progress) -> Contents:
    """Writes all that the database holds at one moment; the service may go on writing.

    Args:
        engine: of a database with today's tables.
        file: to write to.
        made: now, as a FHIR instant.
        progress: is told what was written.

    Raises:
        StorageError: the database failed; the file is of no use.
    """
    digest = hashlib.sha256()
    with told(), engine.connect() as opened, gzip.GzipFile("", "wb", 6, file, mtime=0) as packed:
        connection = _one_moment(opened)
        contents = Contents(made, _count(connection))

        def line(value: object) -> None:
            text = json.dumps(value, ensure_ascii=False, separators=(",", ":")).encode() + b"\n"
            digest.update(text)
            packed.write(text)

        line({"fhirgallop-backup": _FORM, "tables": SCHEMA_VERSION, "made": made, "rows": contents.rows})
        for table in _TABLES:
            line({"table": table.name, "columns": [column.name for column in table.columns]})
            for number, row in enumerate(_rows(connection, table), 1):
                line(row)
                if number % _AT_ONCE == 0:
                    progress(table.name, number)
            progress(table.name, contents.rows[table.name])
        packed.write(json.dumps({"sha256": digest.hexdigest()}).encode() + b"\n")
    return contents


def check_backup(path: Path) -> Contents:
    """Reads a backup through to its end.

    Raises:
        BackupError: it is none, is broken or cut off, or its tables are of another version.
    """
    digest = hashlib.sha256()
    last: bytes | None = None
    head: dict[str, Any] | None = None
    for text in _lines(path):
        if last is not None:
            digest.update(last)
        if head is None:
            head = _head(path, text)
        last = text
    try:
        told_digest = json.loads(last or b"")["sha256"]
    except (ValueError, TypeError, KeyError):
        raise BackupError(f"{path}: the backup is cut off; use another") from None
    if head is None or told_digest != digest.hexdigest():
        raise BackupError(f"{path}: the backup is damaged (its checksum is wrong); use another")
    return Contents(head["made"], head["rows"])


def read_backup(engine: Engine, path: Path, *, progress: Progress) -> Contents:
    """Fills an empty database from a backup, whole or not at all; the backup is checked first.

    Args:
        engine: of a database that has no tables of ours, or only empty ones.
        path: the backup.
        progress: is told what was read.

    Raises:
        BackupError: the backup cannot be used, or the database is not empty.
        SettingsError: the database cannot be used.
    """
    contents = check_backup(path)
    with opening(), changing_tables(engine) as connection:
        if found_version(connection) is None:
            metadata.create_all(connection)
            connection.execute(insert(schema_version).values(version=SCHEMA_VERSION))
        elif found_version(connection) != SCHEMA_VERSION or any(_count(connection).values()):
            raise BackupError("the database is not empty; restore into a new one, and keep this one aside")
        try:
            _fill(connection, path, progress)
        except SQLAlchemyError as error:
            reason = type(getattr(error, "orig", None) or error).__name__
            raise BackupError(f"the database could not be filled ({reason}); it is as it was") from None
        _count_on(connection)
    return contents


def _one_moment(opened: Connection) -> Connection:
    """All that is read on this connection is the state of one moment."""
    if opened.dialect.name == "sqlite":
        opened.exec_driver_sql("BEGIN")
        return opened
    return opened.execution_options(isolation_level="REPEATABLE READ", postgresql_readonly=True)


def _count(connection: Connection) -> Mapping[str, int]:
    query = [(table.name, select(func.count()).select_from(table)) for table in _TABLES]
    return {name: connection.scalar(counting) or 0 for name, counting in query}


def _rows(connection: Connection, table: Table) -> Iterator[list[Any]]:
    kept = [column.type.python_type is bytes for column in table.columns]
    query = select(*table.columns).order_by(*table.primary_key.columns)
    for row in connection.execution_options(yield_per=_AT_ONCE).execute(query):
        yield [
            b64encode(value).decode() if binary and value is not None else value
            for value, binary in zip(row, kept, strict=True)
        ]


def _lines(path: Path) -> Iterator[bytes]:
    try:
        with gzip.open(path, "rb") as packed:
            while text := packed.readline(_LONGEST_LINE):
                if not text.endswith(b"\n"):
                    raise BackupError(f"{path}: the backup is cut off; use another")
                yield text
    except (EOFError, gzip.BadGzipFile, zlib.error):
        raise BackupError(f"{path}: this is no backup, or one that is cut off or damaged") from None


def _head(path: Path, text: bytes) -> dict[str, Any]:
    try:
        head: dict[str, Any] = json.loads(text)
        form, tables = head["fhirgallop-backup"], head["tables"]
        made, rows = head["made"], head["rows"]
    except (ValueError, TypeError, KeyError):
        raise BackupError(f"{path}: this is no backup of fhirgallop") from None
    if form != _FORM or tables != SCHEMA_VERSION:
        raise BackupError(
            f"{path}: the backup has tables of version {tables}, this program those of {SCHEMA_VERSION}; "
            "restore it with the program that made it, and run `fhirgallop database upgrade` with this one"
        )
    return {"made": made, "rows": rows}


def _fill(connection: Connection, path: Path, progress: Progress) -> None:
    table: Table | None = None
    columns: list[Column[Any]] = []
    rows: list[dict[str, Any]] = []
    done = 0
    lines = _lines(path)
    next(lines)
    for text in lines:
        value = json.loads(text)
        if isinstance(value, list):
            rows.append(_values(columns, value))
        if rows and (len(rows) == _AT_ONCE or isinstance(value, dict)):
            assert table is not None  # noqa: S101 - the checksum holds: rows come after their table
            connection.execute(insert(table), rows)
            done += len(rows)
            progress(table.name, done)
            rows = []
        if isinstance(value, dict) and "table" in value:
            table, done = metadata.tables[value["table"]], 0
            columns = [table.columns[name] for name in value["columns"]]


def _values(columns: list[Column[Any]], row: list[Any]) -> dict[str, Any]:
    return {
        column.name: b64decode(value) if column.type.python_type is bytes and value is not None else value
        for column, value in zip(columns, row, strict=True)
    }


def _count_on(connection: Connection) -> None:
    """New rows are numbered on from those that were filled in; SQLite does so by itself."""
    if connection.dialect.name == "sqlite":
        return
    for table in _TABLES:
        key = table.autoincrement_column
        if key is not None:
            connection.execute(
                select(
                    func.setval(
                        func.pg_get_serial_sequence(table.name, key.name),
                        select(func.coalesce(func.max(key), 0) + 1).scalar_subquery(),
                        False,
                    )
                )
            )
