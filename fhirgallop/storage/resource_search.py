"""Coded resources found by their columns, read, and written in one transaction.

Every method raises StorageError when the database failed; nothing of that call was then kept.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any, Final, Literal

from sqlalchemy import ColumnElement, Connection, Engine, Select, and_, func, not_, or_, select

from fhirgallop.storage.resources import NewVersion, Written, add_versions
from fhirgallop.storage.submissions import told
from fhirgallop.storage.tables import resource_identifiers, resources

Order = Literal["changed", "-changed", "date", "-date"]
Prefix = Literal["eq", "ne", "gt", "lt", "ge", "le", "sa", "eb", "overlaps"]

BEFORE_ALL: Final = -(1 << 62)  # where resources without a date stand


@dataclass(frozen=True, slots=True)
class Span:
    """A comparison with the moments from `start` to `end` (ms since 1970)."""

    prefix: Prefix
    start: int
    end: int


@dataclass(frozen=True, slots=True)
class Name:
    """A name a resource may be asked for by: a digest, and the id that says the same (or none)."""

    token: str
    fhir_id: str = ""


@dataclass(frozen=True, slots=True)
class Wanted:
    """What is looked for; each part holds alternatives, and all parts must hold.

    Attributes:
        edition: FHIR edition.
        type: resource type.
        ids: ids of the resources.
        patients: digests.
        encounters: digests.
        findings: ids of the catalogue's findings; "" for what is no finding of ours.
        names: by which identifiers.
        dates: by when it took place.
        updates: by when it was changed here.
    """

    edition: str
    type: str
    ids: tuple[tuple[str, ...], ...] = ()
    patients: tuple[tuple[str, ...], ...] = ()
    encounters: tuple[tuple[str, ...], ...] = ()
    findings: tuple[tuple[str, ...], ...] = ()
    names: tuple[tuple[Name, ...], ...] = ()
    dates: tuple[tuple[Span, ...], ...] = ()
    updates: tuple[tuple[Span, ...], ...] = ()


@dataclass(frozen=True, slots=True)
class Place:
    """Where in an order a resource stands: its date or 0, and its number."""

    value: int
    number: int


@dataclass(frozen=True, slots=True)
class Kept:
    """One version of a resource."""

    number: int
    edition: str
    type: str
    fhir_id: str
    version: int
    updated: int
    patient: str
    encounter: str
    date_from: int | None
    body: bytes

    def place(self, order: Order) -> Place:
        """Where it stands in that order."""
        if order in ("changed", "-changed"):
            return Place(0, self.number)
        return Place(BEFORE_ALL if self.date_from is None else self.date_from, self.number)


_NAMES: Final = (
    "id",
    "edition",
    "type",
    "fhir_id",
    "version",
    "updated",
    "patient",
    "encounter",
    "date_from",
    "body",
)
_COLUMNS: Final = [resources.c[name] for name in _NAMES]
_WHEN: Final = func.coalesce(resources.c.date_from, BEFORE_ALL)


class Resources:
    """Reads, searches and writes coded resources."""

    def __init__(self, engine: Engine) -> None:
        self._engine = engine

    def read(self, edition: str, type_: str, fhir_id: str) -> Kept | None:
        """The current version."""
        return self._one(_of(edition, type_, fhir_id).where(resources.c.current))

    def version(self, edition: str, type_: str, fhir_id: str, version: int) -> Kept | None:
        """One version."""
        return self._one(_of(edition, type_, fhir_id).where(resources.c.version == version))

    def history(self, edition: str, type_: str, fhir_id: str, *, below: int | None, limit: int) -> list[Kept]:
        """The versions, newest first: at most `limit`, and only those below a version where one is named."""
        query = _of(edition, type_, fhir_id).order_by(resources.c.version.desc()).limit(limit)
        if below is not None:
            query = query.where(resources.c.version < below)
        return self._many(query)

    def find(self, wanted: Wanted, *, order: Order, after: Place | None, limit: int) -> list[Kept]:
        """The current resources that are wanted, from after a place on, in order."""
        back = order.startswith("-")
        keys = [resources.c.id] if order.endswith("changed") else [_WHEN, resources.c.id]
        query = select(*_COLUMNS).where(*_conditions(wanted))
        query = query.order_by(*(key.desc() if back else key for key in keys)).limit(limit)
        if after is not None:
            query = query.where(_beyond(keys, after, back=back))
        return self._many(query)

    def count(self, wanted: Wanted) -> int:
        """How many there are."""
        query = select(func.count()).select_from(resources).where(*_conditions(wanted))
        with told(), self._engine.connect() as connection:
            return connection.scalar(query) or 0

    def write(
        self,
        versions: Sequence[NewVersion],
        *,
        at: int,
        also: Sequence[Callable[[Connection, int], None]] = (),
    ) -> list[Written]:
        """Adds versions that come without an examination, all or none.

        What is in `also` is done in the same transaction, and called with 0 for the number of a row.

        Raises:
            IntegrityError: another request changed one of them at the same moment.
            ChangedMeanwhileError: one does not stand at the version that was to be followed.
        """
        with told(), self._engine.begin() as connection:
            written = add_versions(connection, versions, at=at, submission=None)
            for act in also:
                act(connection, 0)
        return written

    def _one(self, query: Select[Any]) -> Kept | None:
        with told(), self._engine.connect() as connection:
            row = connection.execute(query).one_or_none()
        return Kept(*row) if row else None

    def _many(self, query: Select[Any]) -> list[Kept]:
        with told(), self._engine.connect() as connection:
            return [Kept(*row) for row in connection.execute(query)]


def _of(edition: str, type_: str, fhir_id: str) -> Select[Any]:
    same = (resources.c.edition == edition, resources.c.type == type_, resources.c.fhir_id == fhir_id)
    return select(*_COLUMNS).where(*same)


def _conditions(wanted: Wanted) -> list[ColumnElement[bool]]:
    columns = resources.c
    found = [columns.edition == wanted.edition, columns.type == wanted.type, columns.current.is_(True)]
    found += [columns.fhir_id.in_(some) for some in wanted.ids]
    found += [_party(columns.patient, some) for some in wanted.patients]
    found += [_party(columns.encounter, some) for some in wanted.encounters]
    found += [columns.finding.in_(some) for some in wanted.findings]
    found += [_named(some) for some in wanted.names]
    found += [or_(*(_spans(one) for one in some)) for some in wanted.dates]
    for some in wanted.updates:
        found.append(or_(*(_compared(one, columns.updated, columns.updated) for one in some)))
    return found


def _party(column: ColumnElement[str], digests: Sequence[str]) -> ColumnElement[bool]:
    """A patient or encounter: by its first name, or by another that was written beside it."""
    return or_(column.in_(digests), resources.c.id.in_(_holders(digests)))


def _named(names: Sequence[Name]) -> ColumnElement[bool]:
    ids = [name.fhir_id for name in names if name.fhir_id]
    by_token = resources.c.id.in_(_holders([name.token for name in names]))
    return or_(resources.c.fhir_id.in_(ids), by_token) if ids else by_token


def _holders(tokens: Sequence[str]) -> Select[tuple[int]]:
    return select(resource_identifiers.c.resource).where(resource_identifiers.c.token.in_(tokens))


def _spans(span: Span) -> ColumnElement[bool]:
    start, end = resources.c.date_from, resources.c.date_to
    return and_(start.is_not(None), _compared(span, start, end))


def _compared(span: Span, start: ColumnElement[int], end: ColumnElement[int]) -> ColumnElement[bool]:
    """Source: FHIR R4 search, "Prefixes": what each says of two ranges."""
    within = and_(start >= span.start, end <= span.end)
    match span.prefix:
        case "eq":
            return within
        case "ne":
            return not_(within)
        case "gt":
            return end > span.end
        case "lt":
            return start < span.start
        case "ge":
            return or_(end > span.end, within)
        case "le":
            return or_(start < span.start, within)
        case "sa":
            return start > span.end
        case "eb":
            return end < span.start
        case "overlaps":
            return and_(start <= span.end, end >= span.start)


def _beyond(keys: Sequence[ColumnElement[int]], after: Place, *, back: bool) -> ColumnElement[bool]:
    number = keys[-1]
    later = number < after.number if back else number > after.number
    if len(keys) == 1:
        return later
    when = keys[0]
    apart = when < after.value if back else when > after.value
    return or_(apart, and_(when == after.value, later))
