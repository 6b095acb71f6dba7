"""Coded resources, each version of each: what the FHIR addresses give out.

A version is never changed; which one is current moves. What a body means is the caller's: here it is bytes,
with the columns that it is found by.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from functools import lru_cache
from itertools import chain
from typing import Any, Final, NamedTuple, TypeVar

from sqlalchemy import Connection, Dialect, and_, insert, or_, select, update

from fhirgallop.storage.tables import resource_identifiers, resources

_AT_ONCE: Final = 200
# The columns of a new row, in the order of its values.
_WRITTEN: Final = (
    "edition", "type", "fhir_id", "version", "current", "deleted", "updated", "patient", "encounter",
    "finding", "date_from", "date_to", "submission", "body",
)  # fmt: skip
_T = TypeVar("_T")


class NewVersion(NamedTuple):
    """What a resource is from now on (a tuple: an examination makes dozens at a time).

    Attributes:
        edition: FHIR edition it is written in.
        type: resource type.
        fhir_id: its id; the same id is the same resource.
        patient: digest of its patient; empty for none.
        encounter: digest of its encounter; empty for none.
        finding: id of the catalogue's finding; empty for none.
        date_from: first moment its date may mean, in ms since 1970; None when it has no date.
        date_to: last such moment.
        body: its JSON without id, versionId and lastUpdated.
        tokens: digests by which it may also be asked for.
        follows: the version it is meant to follow (0: it is new); None where any will do.
    """

    edition: str
    type: str
    fhir_id: str
    patient: str
    encounter: str
    finding: str
    date_from: int | None
    date_to: int | None
    body: bytes
    tokens: tuple[str, ...] = ()
    follows: int | None = None


class ChangedMeanwhileError(Exception):
    """A resource has another version than the one that was to be followed."""


@dataclass(frozen=True, slots=True)
class Written:
    """The version a resource has after it was given; `changed` is False when it was the same before."""

    version: int
    updated: int
    changed: bool


def add_versions(
    connection: Connection,
    versions: Sequence[NewVersion],
    *,
    at: int,
    submission: int | None,
    fresh: bool = False,
) -> list[Written]:
    """Adds a version of every resource whose body is another than before, in the caller's transaction.

    Args:
        connection: in a transaction; nothing is committed here.
        versions: at most one of each resource.
        at: now, in ms since 1970.
        submission: row of the examination's version they come with; None when they come alone.
        fresh: the caller takes them all for new ones; spares a look for earlier versions.

    Returns:
        What became of each, in their order.

    Raises:
        IntegrityError: another request was first, or something `fresh` was there already; the transaction is
            of no use any more.
        ChangedMeanwhileError: a resource does not stand at the version that was to be followed.
    """
    before = {} if fresh else _current(connection, versions)
    written: list[Written] = []
    rows: list[tuple[Any, ...]] = []
    replaced: list[int] = []
    for new in versions:
        old = before.get((new.edition, new.type, new.fhir_id))
        if new.follows not in (None, old.version if old else 0):
            raise ChangedMeanwhileError
        if old is not None and old.body == new.body:
            written.append(Written(old.version, old.updated, changed=False))
            continue
        version = 1
        if old is not None:
            version = old.version + 1
            replaced.append(old.id)
        written.append(Written(version, at, changed=True))
        rows.append(
            (new.edition, new.type, new.fhir_id, version, True, False, at, new.patient, new.encounter,
             new.finding, new.date_from, new.date_to, submission, new.body)
        )  # fmt: skip
    for some in _slices(replaced):
        connection.execute(update(resources).where(resources.c.id.in_(some)).values(current=False))
    if rows:
        _insert(connection, rows)
    _add_tokens(connection, versions, written)
    return written


def changed_alone(connection: Connection, versions: Sequence[NewVersion]) -> bool:
    """Whether these versions take the place of one that came by itself, and not with its examination."""
    before = _current(connection, versions)
    olds = ((before.get((new.edition, new.type, new.fhir_id)), new) for new in versions)
    return any(old is not None and old.submission is None and old.body != new.body for old, new in olds)


def _insert(connection: Connection, rows: list[tuple[Any, ...]]) -> None:
    """Adds rows, past what prepares each value for the driver: ours are plain, and there are many."""
    statement, named = _statement(connection.dialect)
    if named:
        connection.exec_driver_sql(statement, [dict(zip(_WRITTEN, row, strict=True)) for row in rows])
        return
    # all in one statement: after each, SQLite's driver has to wait for the interpreter that others compute in
    one_more = f", ({', '.join('?' * len(_WRITTEN))})"
    for some in _slices(rows):
        connection.exec_driver_sql(statement + one_more * (len(some) - 1), tuple(chain.from_iterable(some)))


@lru_cache(maxsize=8)
def _statement(dialect: Dialect) -> tuple[str, bool]:
    """The INSERT in a driver's own words, and whether its parameters have names."""
    compiled = insert(resources).compile(dialect=dialect, column_keys=list(_WRITTEN))
    return str(compiled), not compiled.positional


def _current(connection: Connection, versions: Sequence[NewVersion]) -> dict[tuple[str, str, str], Any]:
    columns = (resources.c[name] for name in
               ("id", "edition", "type", "fhir_id", "version", "updated", "submission", "body"))  # fmt: skip
    query = select(*columns).where(resources.c.current)
    by_kind: dict[tuple[str, str], list[str]] = {}
    for new in versions:
        by_kind.setdefault((new.edition, new.type), []).append(new.fhir_id)
    found: dict[tuple[str, str, str], Any] = {}
    for (edition, type_), ids in by_kind.items():
        for some in _slices(ids):
            same = (resources.c.edition == edition, resources.c.type == type_, resources.c.fhir_id.in_(some))
            for row in connection.execute(query.where(*same)):
                found[row.edition, row.type, row.fhir_id] = row
    return found


def _add_tokens(connection: Connection, versions: Sequence[NewVersion], written: Sequence[Written]) -> None:
    told = [
        (new, now.version) for new, now in zip(versions, written, strict=True) if new.tokens and now.changed
    ]
    key = ("edition", "type", "fhir_id", "version")
    for some in _slices(told):
        tokens = {(n.edition, n.type, n.fhir_id, version): n.tokens for n, version in some}
        same = [
            and_(*(resources.c[name] == value for name, value in zip(key, values, strict=True)))
            for values in tokens
        ]
        query = select(resources.c.id, *(resources.c[name] for name in key)).where(or_(*same))
        rows = [
            {"resource": id_, "token": token}
            for id_, *values in connection.execute(query)
            for token in dict.fromkeys(tokens[tuple(values)])
        ]
        connection.execute(insert(resource_identifiers), rows)


def _slices(items: Sequence[_T]) -> Iterator[Sequence[_T]]:
    for start in range(0, len(items), _AT_ONCE):
        yield items[start : start + _AT_ONCE]
