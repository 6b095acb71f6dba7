"""Opens the database: makes the tables of a new one, and takes no other form of them than today's."""

from __future__ import annotations

import os
import sqlite3
import time
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from functools import partial
from pathlib import Path
from typing import Any, Final

from sqlalchemy import URL, Connection, Engine, create_engine, event, insert, inspect, make_url, select
from sqlalchemy.exc import ArgumentError, SQLAlchemyError
from sqlalchemy.pool import ConnectionPoolEntry

from fhirgallop.errors import SettingsError
from fhirgallop.storage.tables import SCHEMA_VERSION, metadata, schema_version

_BUSY_SECONDS: Final = 10
# who makes or changes tables waits longer for another who does: there may be much to carry forward
_TABLES_BUSY_SECONDS: Final = 3600
# any number, the same in every version: who changes the tables of a PostgreSQL database holds this lock
_TABLES_LOCK: Final = 7_401_962_538
# what to do, by words of the drivers (PostgreSQL's library and SQLite, in English; else a general word)
_CURES: Final = (
    ("Connection refused", "nothing listens at that host and port: is the server up?"),
    ("resolve host", "its host name is not known"),
    ("authentication failed", "the server refuses that user or password"),
    ("no password supplied", "the server wants a password in the address (see FHIRGALLOP_DATABASE_FILE)"),
    ("pg_hba.conf", "the server's pg_hba.conf lets that user not in from here, or not without TLS"),
    ('role "', "the server knows no such user, or does not permit it"),
    ('database "', "the server has no such database: create it empty (createdb)"),
    ("unable to open database file", "its folder is not there, or not writable for this user"),
    ("file is not a database", "the file is something else; name another"),
)


def open_database(address: str, *, durable: bool = True) -> Engine:
    """The engine of the database at `address`, with its tables in place.

    Args:
        address: as SQLAlchemy writes it, `sqlite:///file` or `postgresql://user@host/name`.
        durable: whether what is kept survives a power cut the moment it is said to be kept; else the last
            moments may be lost then (never by the death of a process).

    Raises:
        SettingsError: the database cannot be opened, or its tables have another form.
    """
    engine = connect(address, durable=durable)
    try:
        found = version_of(engine)
        if found is None:
            found = _made(engine)
    except SettingsError:
        engine.dispose()
        raise
    if found != SCHEMA_VERSION:
        engine.dispose()
        raise SettingsError(other_form(found))
    return engine


def connect(address: str, *, durable: bool = True) -> Engine:
    """The engine of the database at `address`, whatever is in it; arguments as in `open_database`.

    Raises:
        SettingsError: that is no address of a database which can be used here.
    """
    with opening():
        url = _with_driver(make_url(address))
        if url.get_backend_name() == "sqlite":
            if url.database in (None, "", ":memory:"):
                raise SettingsError("database names no file; what is kept in memory is gone with the program")
            engine = create_engine(url, connect_args={"timeout": _BUSY_SECONDS}, hide_parameters=True)
            event.listen(engine, "do_connect", _private)
            event.listen(engine, "connect", partial(_set_up_sqlite, "FULL" if durable else "NORMAL"))
            return engine
        # each connection is tried before it is used: after a restart of the server the next request goes well
        return create_engine(
            url, pool_pre_ping=True, pool_size=10, max_overflow=30, pool_timeout=_BUSY_SECONDS,
            connect_args=_manners(url, durable), hide_parameters=True,
        )  # fmt: skip


def version_of(engine: Engine) -> int | None:
    """The version of the tables; None where the database is empty.

    Raises:
        SettingsError: the database cannot be opened, or another program's tables are in the way.
    """
    with opening(), engine.connect() as connection:
        return found_version(connection)


def other_form(found: int) -> str:
    """What is to be done about a database with tables of another version."""
    if found > SCHEMA_VERSION:
        return (
            f"the database has tables of version {found}, this program those of {SCHEMA_VERSION}; "
            "use the newer program that made them"
        )
    return (
        f"the database has tables of version {found}, this program those of {SCHEMA_VERSION}; stop the "
        "service, copy the database to be safe, and run `fhirgallop database upgrade`"
    )


@contextmanager
def changing_tables(engine: Engine) -> Iterator[Connection]:
    """One transaction in which tables may be made and changed, by one process at a time; the others wait.

    Foreign keys of SQLite are not followed meanwhile (a table that is rebuilt would take along all that
    refers to it); they are looked over before the end.
    """
    with engine.connect() as connection:
        if engine.dialect.name != "sqlite":
            connection.exec_driver_sql(f"SELECT pg_advisory_xact_lock({_TABLES_LOCK})")
            yield connection
            connection.commit()
            return
        connection.exec_driver_sql(f"PRAGMA busy_timeout={_TABLES_BUSY_SECONDS * 1000}")
        connection.exec_driver_sql("PRAGMA foreign_keys=OFF")
        connection.exec_driver_sql("BEGIN IMMEDIATE")
        try:
            yield connection
            if connection.exec_driver_sql("PRAGMA foreign_key_check").first():
                raise SettingsError("the database refers to rows that are not there; restore a backup")
            connection.commit()
        finally:
            connection.invalidate()  # its settings are not those of the others


def _made(engine: Engine) -> int:
    """Makes today's tables, unless another process has just made some."""
    with opening(), changing_tables(engine) as connection:
        found = found_version(connection)
        if found is None:
            metadata.create_all(connection)
            connection.execute(insert(schema_version).values(version=SCHEMA_VERSION))
            found = SCHEMA_VERSION
    return found


def found_version(connection: Connection) -> int | None:
    """The same on a connection."""
    there = set(inspect(connection).get_table_names())
    if schema_version.name in there:
        return connection.scalar(select(schema_version.c.version))
    if in_the_way := sorted(there & set(metadata.tables)):
        raise SettingsError(
            f"the database has a table {in_the_way[0]} that is not of this program; give fhirgallop a "
            "database of its own"
        )
    return None


def _with_driver(url: URL) -> URL:
    return url.set(drivername="postgresql+psycopg") if url.drivername == "postgresql" else url


def _manners(url: URL, durable: bool) -> dict[str, Any]:
    """Connections to PostgreSQL are given up when the other side is gone, also in the middle of an answer."""
    if url.get_driver_name() != "psycopg":
        return {}
    commit = {} if durable else {"options": "-c synchronous_commit=off"}
    return {
        **commit,
        "connect_timeout": _BUSY_SECONDS, "application_name": "fhirgallop", "keepalives_idle": 30,
        "keepalives_interval": 10, "keepalives_count": 3, "tcp_user_timeout": 30_000,
    }  # fmt: skip


def _private(_dialect: Any, _entry: Any, arguments: list[Any], _named: dict[str, Any]) -> None:
    """A new file is for its owner alone; SQLite gives the files beside it the same rights."""
    path = Path(arguments[0])
    # never opened where it exists: to close it again would take away the locks that this process has on it
    if not path.exists():
        with suppress(OSError):  # SQLite will say what is wrong, or another made it at the same moment
            os.close(os.open(path, os.O_CREAT | os.O_EXCL | os.O_WRONLY, 0o600))


def _set_up_sqlite(synchronous: str, connection: Any, _entry: ConnectionPoolEntry) -> None:
    cursor = connection.cursor()
    _write_ahead(cursor)
    cursor.execute(f"PRAGMA synchronous={synchronous}")
    cursor.execute("PRAGMA foreign_keys=ON")
    # what is deleted or replaced is overwritten
    cursor.execute("PRAGMA secure_delete=ON")
    cursor.close()


def _write_ahead(cursor: sqlite3.Cursor) -> None:
    """SQLite does not wait by itself for another who switches the journal at the same moment."""
    for left in range(_BUSY_SECONDS * 20, -1, -1):
        try:
            cursor.execute("PRAGMA journal_mode=WAL")
        except sqlite3.OperationalError as error:
            if error.sqlite_errorcode != sqlite3.SQLITE_BUSY or not left:
                raise
            time.sleep(0.05)
        else:
            return


@contextmanager
def opening() -> Iterator[None]:
    """What keeps a database from being opened, in words for the operator and without its password."""
    try:
        yield
    except ArgumentError:
        raise SettingsError("database is not an address such as sqlite:///fhirgallop.sqlite3") from None
    except ModuleNotFoundError as error:
        raise SettingsError(f"that kind of database needs {error.name}, which is not installed") from None
    except SQLAlchemyError as error:
        cause = getattr(error, "orig", None) or error
        # never the driver's own words: parts of a misread address, and so of its password, may be among them
        cure = next((cure for words, cure in _CURES if words in str(cause)), "check its address and rights")
        raise SettingsError(f"the database cannot be opened ({type(cause).__name__}); {cure}") from None
