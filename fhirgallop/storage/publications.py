"""Which version of a template map is in use: published, approved by a second person, put back."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final, Literal

from sqlalchemy import Connection, Engine, RowMapping, func, insert, select, update

from fhirgallop.storage.submissions import told
from fhirgallop.storage.tables import maps, publications

USED: Final = "used"
WAITING: Final = "waiting"
APPROVED: Final = "approved"
DECLINED: Final = "declined"

State = Literal["used", "declined"]


@dataclass(frozen=True, slots=True)
class Publication:
    """One decision about a map.

    Attributes:
        name, version: of the map.
        kind: `publish`, or `back` to an earlier version.
        state: waits for a second person, was approved by one or declined, or is (or was) in use.
        author, approver: as they named themselves.
        author_key: who the author was, not readable as that.
        note: why.
        checked: the check at that moment, as JSON.
        at: FHIR instant.
        id: the order of decisions; 0 before it is kept.
    """

    name: str
    version: str
    kind: str
    state: str
    author: str
    author_key: str
    approver: str
    note: str
    checked: bytes
    at: str
    id: int = 0


class Publications:
    """Keeps the decisions; every method raises StorageError when the database failed."""

    def __init__(self, engine: Engine) -> None:
        self._engine = engine

    def add(self, one: Publication) -> int:
        """Keeps a decision; returns its id."""
        row = {name: getattr(one, name) for name in Publication.__slots__ if name != "id"}
        with told(), self._engine.begin() as connection:
            key = connection.execute(insert(publications).values(**row)).inserted_primary_key
        return int(key[0]) if key else 0

    def settle(self, waiting: Publication, state: State, approver: str, *, at: str) -> bool:
        """A second person's answer (`used` or `declined`) to what waits; False where it waits no more.

        What is approved counts from now on, so that it is kept once more, at the end.
        """
        row = {name: getattr(waiting, name) for name in Publication.__slots__ if name != "id"}
        row |= {"state": USED, "approver": approver, "at": at}
        mine = (publications.c.id == waiting.id) & (publications.c.state == WAITING)
        answer = APPROVED if state == USED else state
        with told(), self._engine.begin() as connection:
            change = update(publications).where(mine).values(state=answer, approver=approver)
            waited = connection.execute(change).rowcount == 1
            if waited and state == USED:
                connection.execute(insert(publications).values(**row))
        return waited

    def history(self, name: str) -> list[Publication]:
        """Every decision about a map, the newest first."""
        query = select(publications).where(publications.c.name == name).order_by(publications.c.id.desc())
        with told(), self._engine.connect() as connection:
            return [_publication(row) for row in connection.execute(query).mappings()]

    def waiting(self) -> list[Publication]:
        """What waits for a second person, the oldest first."""
        query = select(publications).where(publications.c.state == WAITING).order_by(publications.c.id)
        with told(), self._engine.connect() as connection:
            return [_publication(row) for row in connection.execute(query).mappings()]

    def newest(self) -> int:
        """The id of the newest decision that counts; cheap enough to ask often."""
        query = select(func.max(publications.c.id)).where(publications.c.state == USED)
        with told(), self._engine.connect() as connection:
            return connection.scalar(query) or 0

    def in_use(self) -> dict[str, tuple[str, bytes]]:
        """Name -> version and text of every map that was published here."""
        with told(), self._engine.connect() as connection:
            return _in_use(connection)


def _in_use(connection: Connection) -> dict[str, tuple[str, bytes]]:
    newest = select(func.max(publications.c.id)).where(publications.c.state == USED)
    newest = newest.group_by(publications.c.name)
    query = select(publications.c.name, publications.c.version, maps.c.text).where(
        publications.c.id.in_(newest),
        maps.c.name == publications.c.name,
        maps.c.version == publications.c.version,
    )
    return {row.name: (row.version, row.text) for row in connection.execute(query)}


def _publication(row: RowMapping) -> Publication:
    return Publication(**{str(name): value for name, value in row.items()})
