"""Opens the database, makes the tables of a new one, and refuses one of another form."""

from __future__ import annotations

from typing import Any, Final

from sqlalchemy import Engine, create_engine, event, insert, make_url, select
from sqlalchemy.exc import ArgumentError, SQLAlchemyError
from sqlalchemy.pool import ConnectionPoolEntry

from fhirgallop.errors import SettingsError
from fhirgallop.storage.tables import SCHEMA_VERSION, metadata, schema_version

_BUSY_SECONDS: Final = 10


def open_database(address: str) -> Engine:
    """The engine of the database at `address`, with its tables in place.

    Raises:
        SettingsError: the database cannot be opened, or its tables have another form.
    """
    try:
        url = make_url(address)
        sqlite = url.get_backend_name() == "sqlite"
        if sqlite and url.database in (None, "", ":memory:"):
            raise SettingsError("database names no file; what is kept in memory is gone with the program")
        engine = create_engine(url, connect_args={"timeout": _BUSY_SECONDS} if sqlite else {})
        if sqlite:
            event.listen(engine, "connect", _durable_sqlite)
        with engine.begin() as connection:
            metadata.create_all(connection)
            found = connection.scalar(select(schema_version.c.version))
            if found is None:
                connection.execute(insert(schema_version).values(version=SCHEMA_VERSION))
                found = SCHEMA_VERSION
    except ArgumentError:
        raise SettingsError("database is not an address such as sqlite:///fhirgallop.sqlite3") from None
    except ModuleNotFoundError as error:
        raise SettingsError(f"that kind of database needs {error.name}, which is not installed") from None
    except SQLAlchemyError as error:
        reason = type(getattr(error, "orig", None) or error).__name__
        raise SettingsError(
            f"the database cannot be opened ({reason}); check its address and rights"
        ) from None
    if found != SCHEMA_VERSION:
        raise SettingsError(
            f"the database has tables of version {found}, this program those of {SCHEMA_VERSION}; "
            "use the program that made them"
        )
    return engine


def _durable_sqlite(connection: Any, _entry: ConnectionPoolEntry) -> None:
    cursor = connection.cursor()
    cursor.execute("PRAGMA journal_mode=WAL")
    cursor.execute("PRAGMA synchronous=NORMAL")
    cursor.execute("PRAGMA foreign_keys=ON")
    cursor.close()
