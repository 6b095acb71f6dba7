"""Every version of a template map that was ever used, as it was written: a version is never another."""

from __future__ import annotations

import hashlib
from collections.abc import Sequence
from dataclasses import dataclass

from sqlalchemy import Connection, Engine, insert, select
from sqlalchemy.exc import IntegrityError

from fhirgallop.storage.submissions import told
from fhirgallop.storage.tables import maps


@dataclass(frozen=True, slots=True)
class KeptMap:
    """One version of a map; `first_used` is a FHIR instant."""

    name: str
    version: str
    first_used: str


class MapStore:
    """Keeps the maps; every method raises StorageError when the database failed."""

    def __init__(self, engine: Engine) -> None:
        self._engine = engine

    def keep(self, name: str, version: str, text: bytes, *, at: str) -> bool:
        """Keeps a version as it is written.

        Args:
            name: the map's name.
            version: its version.
            text: the file's bytes.
            at: now, as a FHIR instant.

        Returns:
            False when that version of that map is kept already with another text; nothing is then changed.
        """
        digest = hashlib.sha256(text).hexdigest()
        row = {"name": name, "version": version, "digest": digest, "text": text, "first_used": at}
        try:
            with told(), self._engine.begin() as connection:
                known = _digest(connection, name, version)
                if known is None:
                    connection.execute(insert(maps).values(**row))
                    return True
        except IntegrityError:  # another process keeps it at the same moment
            with told(), self._engine.connect() as connection:
                known = _digest(connection, name, version)
        return known == digest

    def versions(self) -> Sequence[KeptMap]:
        """Every version of every map, by name and then in the order in which they were first used."""
        query = select(maps.c.name, maps.c.version, maps.c.first_used)
        query = query.order_by(maps.c.name, maps.c.first_used, maps.c.version)
        with told(), self._engine.connect() as connection:
            return [KeptMap(*row) for row in connection.execute(query)]

    def text(self, name: str, version: str) -> bytes | None:
        """A version as it was written; None where there is none."""
        query = select(maps.c.text).where(maps.c.name == name, maps.c.version == version)
        with told(), self._engine.connect() as connection:
            found: bytes | None = connection.scalar(query)
        return found


def _digest(connection: Connection, name: str, version: str) -> str | None:
    query = select(maps.c.digest).where(maps.c.name == name, maps.c.version == version)
    found: str | None = connection.scalar(query)
    return found
