"""Batches: many examinations in one request, gone through one by one after it was answered.

A worker holds a batch by a lease. Each examination's result is added in the transaction that keeps the
examination, and only by the worker that still holds the batch, at the place that is next: whoever goes on
after a crash starts where the last one stopped, and nothing is done twice.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable, Iterator
from dataclasses import dataclass, fields
from typing import Final

from sqlalchemy import Connection, Engine, Update, and_, delete, func, insert, or_, select, update
from sqlalchemy.exc import IntegrityError

from fhirgallop.storage.submissions import told
from fhirgallop.storage.tables import batch_results, batches, submissions

WAITING: Final = "waiting"
CODING: Final = "coding"
DONE: Final = "done"
CANCELLED: Final = "cancelled"
_AT_ONCE: Final = 20


class SupersededError(Exception):
    """The batch was cancelled, or another worker holds it now; nothing of this step is kept."""


@dataclass(frozen=True, slots=True)
class Batch:
    """A batch, without the body it came with.

    Attributes:
        id: random.
        owner: digest of the caller it belongs to.
        state: waiting, coding, done or cancelled.
        created: milliseconds since 1970 (UTC).
        wish: what was asked for beside the body, as JSON.
        total: records in the body.
        done: records gone through.
        worker: who holds it; empty for nobody.
        lease: until when, in milliseconds since 1970 (UTC).
    """

    id: str
    owner: str
    state: str
    created: int
    wish: bytes
    total: int
    done: int = 0
    worker: str = ""
    lease: int = 0


@dataclass(frozen=True, slots=True)
class NewResult:
    """What became of one record; `submission` is the row its Bundle is kept in, None where there is none."""

    position: int
    status: str
    patient: str
    submission: int | None
    result: bytes


@dataclass(frozen=True, slots=True)
class KeptResult:
    """The same as it is given out; `bundle` is None where there is none, or none any more."""

    position: int
    status: str
    result: bytes
    bundle: bytes | None


_NAMES = tuple(field.name for field in fields(Batch))
_COLUMNS = [batches.c[name] for name in _NAMES]


class Batches:
    """Reads and writes batches; every method raises StorageError when the database failed."""

    def __init__(self, engine: Engine) -> None:
        self._engine = engine

    def add(self, batch: Batch, request: bytes, *also: Callable[[Connection], None]) -> bool:
        """Keeps a new batch with its body; False when another request was first with what `also` adds."""
        values = {name: getattr(batch, name) for name in _NAMES}
        try:
            with told(), self._engine.begin() as connection:
                connection.execute(insert(batches).values(**values, request=request))
                for keep in also:
                    keep(connection)
        except IntegrityError:
            return False
        return True

    def get(self, id_: str, owner: str) -> Batch | None:
        """A batch of this owner that was not cancelled."""
        mine = (batches.c.id == id_, batches.c.owner == owner, batches.c.state != CANCELLED)
        with told(), self._engine.connect() as connection:
            row = connection.execute(select(*_COLUMNS).where(*mine)).one_or_none()
        return Batch(*row) if row else None

    def request(self, id_: str) -> bytes:
        """The body it came with; empty once it is done or cancelled."""
        with told(), self._engine.connect() as connection:
            body: bytes | None = connection.scalar(select(batches.c.request).where(batches.c.id == id_))
        return body or b""

    def claim(self, worker: str, *, now: int, until: int) -> Batch | None:
        """The oldest batch that nobody else holds, held by `worker` until then; None when there is none."""
        let_go = or_(batches.c.lease < now, batches.c.worker == worker)
        free = or_(batches.c.state == WAITING, and_(batches.c.state == CODING, let_go))
        oldest = select(batches.c.id).where(free).order_by(batches.c.created, batches.c.id).limit(1)
        with told(), self._engine.begin() as connection:
            id_ = connection.scalar(oldest)
            if id_ is None:
                return None
            held = update(batches).where(batches.c.id == id_, free)
            taken = connection.execute(held.values(state=CODING, worker=worker, lease=until))
            if taken.rowcount != 1:  # another worker was first; the next turn finds another batch
                return None
            return Batch(*connection.execute(select(*_COLUMNS).where(batches.c.id == id_)).one())

    def release(self, id_: str, worker: str) -> None:
        """Gives a batch back, so that another worker may go on at once."""
        with told(), self._engine.begin() as connection:
            connection.execute(_held(id_, worker).values(state=WAITING, worker="", lease=0))

    def finish(self, id_: str, worker: str) -> None:
        """Nothing is left to do; the body is no longer kept."""
        with told(), self._engine.begin() as connection:
            connection.execute(_held(id_, worker).values(state=DONE, worker="", lease=0, request=b""))

    def cancel(self, id_: str, owner: str) -> Batch | None:
        """Ends a batch, and deletes body and results; what was coded stays. None when there is none."""
        mine = (batches.c.id == id_, batches.c.owner == owner, batches.c.state != CANCELLED)
        with told(), self._engine.begin() as connection:
            held = update(batches).where(*mine).values(state=CANCELLED, worker="", lease=0, request=b"")
            if connection.execute(held).rowcount != 1:
                return None
            connection.execute(delete(batch_results).where(batch_results.c.batch == id_))
            return Batch(*connection.execute(select(*_COLUMNS).where(batches.c.id == id_)).one())

    def counts(self, id_: str) -> Counter[str]:
        """How many records there are of each status."""
        table = batch_results
        query = select(table.c.status, func.count()).where(table.c.batch == id_).group_by(table.c.status)
        with told(), self._engine.connect() as connection:
            return Counter({row[0]: row[1] for row in connection.execute(query)})

    def patients(self, id_: str, *, first: int, count: int) -> list[str]:
        """Digests of the patients whose results these are."""
        table = batch_results
        some = (table.c.batch == id_, table.c.position >= first, table.c.position < first + count)
        query = select(table.c.patient).where(*some, table.c.patient != "").distinct()
        with told(), self._engine.connect() as connection:
            return list(connection.scalars(query.order_by(table.c.patient)))

    def results(self, id_: str, *, first: int, count: int) -> Iterator[KeptResult]:
        """Results in the order of the records, from `first` on, at most `count`; few in memory at once."""
        table = batch_results
        columns = (table.c.position, table.c.status, table.c.result, submissions.c.bundle)
        whole = select(*columns).outerjoin_from(table, submissions, table.c.submission == submissions.c.id)
        for start in range(first, first + count, _AT_ONCE):
            end = min(start + _AT_ONCE, first + count)
            some = (table.c.batch == id_, table.c.position >= start, table.c.position < end)
            with told(), self._engine.connect() as connection:
                rows = connection.execute(whole.where(*some).order_by(table.c.position)).all()
            for row in rows:
                yield KeptResult(*row)
            if len(rows) < end - start:
                return


def add_result(connection: Connection, batch: str, worker: str, result: NewResult, *, lease: int) -> None:
    """Adds a result in the caller's transaction, and holds the batch on until `lease` (milliseconds).

    Raises:
        SupersededError: the worker does not hold the batch any more, or this place was gone through.
    """
    step = _held(batch, worker).where(batches.c.done == result.position)
    if connection.execute(step.values(done=result.position + 1, lease=lease)).rowcount != 1:
        raise SupersededError
    connection.execute(
        insert(batch_results).values(
            batch=batch,
            position=result.position,
            status=result.status,
            patient=result.patient,
            submission=result.submission,
            result=result.result,
        )
    )


def _held(id_: str, worker: str) -> Update:
    return update(batches).where(batches.c.id == id_, batches.c.worker == worker, batches.c.state == CODING)
