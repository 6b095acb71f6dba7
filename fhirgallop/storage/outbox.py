"""What is still to be sent: put in with the examination, taken by one worker at a time, in order.

A row is *waiting*, *sending* (leased to a worker), *delivered*, *failed* (wants a person) or *dropped* (a
person gave it up). Of one patient only the oldest row that waits or is being sent may be taken, so that what
was accepted first arrives first. A failed row holds back the later versions of its own examination alone:
they would overwrite each other, while the patient's other examinations do not.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any, Final, Literal

from sqlalchemy import (
    ColumnElement,
    Connection,
    Engine,
    and_,
    exists,
    func,
    insert,
    select,
    update,
)
from sqlalchemy.exc import IntegrityError
from sqlalchemy.sql.selectable import NamedFromClause

from fhirgallop.storage.submissions import Also, told
from fhirgallop.storage.tables import destinations, outbox, submissions

State = Literal["waiting", "sending", "delivered", "failed", "dropped"]

# The one destination there is; the address behind it may change, what waits for it goes along.
RECORD_SYSTEM: Final = "record-system"
_OPEN: Final = ("waiting", "sending")
_REASON_LENGTH: Final = 500
# rows looked at for one that may be taken: mostly one of the first; all where many wait behind others
_AMONG: Final = (50, 2000, 1_000_000)


def enqueue(
    connection: Connection, *, destination: str, submission: int, exam: str, patient: str, at: int
) -> None:
    """Notes that a submission is to be sent, in the transaction of `connection`.

    Args:
        connection: with the transaction that stores the submission.
        destination: `RECORD_SYSTEM`.
        submission: id of its row.
        exam: identity of the examination.
        patient: digest of the patient's identifier; order is kept within it.
        at: moment in milliseconds since 1970.
    """
    row = {"destination": destination, "submission": submission, "exam": exam, "patient": patient,
           "state": "waiting", "attempts": 0, "created": at, "due": at, "worker": "", "lease": 0,
           "reason": "", "outcome": None}  # fmt: skip
    connection.execute(insert(outbox).values(**row))


@dataclass(frozen=True, slots=True)
class Claim:
    """One delivery in the hands of one worker.

    Attributes:
        id: of the outbox row.
        exam: identity of the examination.
        patient: digest of the patient's identifier.
        worker: who holds it.
        attempts: tries so far, this one counted; a probe of a destination that is down counts as none.
        lease: moment (ms) from which others may take it.
        probe: whether the destination is down and this delivery finds out if it is back.
        failures: how many deliveries to the destination failed in a row before.
        bundle: the Bundle as it was kept.
    """

    id: int
    exam: str
    patient: str
    worker: str
    attempts: int
    lease: int
    probe: bool
    failures: int
    bundle: bytes


@dataclass(frozen=True, slots=True)
class Settled:
    """What became of a claim.

    Attributes:
        state: `delivered`, `waiting` (again at `due`) or `failed`.
        reason: why it is not delivered, without patient data.
        due: moment (ms) of the next try.
        outcome: what the destination answered, as JSON.
    """

    state: Literal["delivered", "waiting", "failed"]
    reason: str = ""
    due: int = 0
    outcome: bytes | None = None


@dataclass(frozen=True, slots=True)
class Rest:
    """How a destination that did not answer well is left alone.

    Attributes:
        weight: how many failures in a row this one counts for.
        until: from the failures in a row to the moment (ms) before which nobody asks it again.
    """

    weight: int
    until: Callable[[int], int]


@dataclass(frozen=True, slots=True)
class Delivery:
    """A row of the outbox, for a person to look at; moments in milliseconds since 1970."""

    id: int
    submission: int
    exam: str
    state: State
    attempts: int
    created: int
    due: int
    reason: str
    outcome: bytes | None


@dataclass(frozen=True, slots=True)
class Tally:
    """How the outbox fares.

    Attributes:
        counts: rows of each state; states without rows are named too.
        oldest: moment (ms) since when the oldest undelivered row waits, is sent or has failed; None without.
        failures: deliveries that failed in a row.
        open_until: moment (ms) before which the destination is not asked; 0 when it may be.
    """

    counts: dict[State, int]
    oldest: int | None
    failures: int
    open_until: int


class Outbox:
    """The deliveries to one destination; every method is one transaction.

    All methods raise StorageError when the database failed; nothing of the call was kept then.
    """

    def __init__(self, engine: Engine, destination: str = RECORD_SYSTEM) -> None:
        self._engine = engine
        self._destination = destination
        self._known = False

    def claim(self, worker: str, now: int, *, lease: int, after: int) -> Claim | None:
        """The next delivery for `worker`; None when nothing may be sent now.

        Args:
            worker: name that no other worker has.
            now: moment in ms.
            lease: ms after which another worker may take the row if this one has said nothing.
            after: failures in a row after which the destination counts as down: it is then asked by one
                delivery at a time, the least tried first, lest one that it cannot take keeps it shut.
        """
        self._register()
        with told(), self._engine.begin() as connection:
            failures, open_until = connection.execute(
                select(destinations.c.failures, destinations.c.open_until).where(self._own())
            ).one()
            if open_until > now:
                return None
            probe = failures >= after
            connection.execute(self._expired(now))
            for among in _AMONG:
                taken = self._taken(worker, now, now + lease, probe=probe, among=among)
                if (row := connection.execute(taken).one_or_none()) is not None:
                    break
            else:
                return None
            if probe and not self._may_probe(connection, open_until, now + lease):
                connection.rollback()
                return None
            bundle = connection.scalar(select(submissions.c.bundle).where(submissions.c.id == row.submission))
        until = now + lease
        return Claim(
            row.id, row.exam, row.patient, worker, row.attempts, until, probe, failures, bundle or b""
        )

    def settle(self, claim: Claim, settled: Settled, rest: Rest | None, *also: Also) -> bool:
        """Records what became of a claim; False when its lease ran out and another worker took it over.

        Args:
            claim: as it was given out.
            settled: what became of it.
            rest: how the destination is left alone; None when it answered as one that is well.
            also: what is kept in the same transaction, called with the id of the row.
        """
        values = {"state": settled.state, "reason": settled.reason[:_REASON_LENGTH], "due": settled.due,
                  "outcome": settled.outcome, "lease": 0, "worker": ""}  # fmt: skip
        held = and_(
            outbox.c.id == claim.id, outbox.c.worker == claim.worker,
            outbox.c.state == "sending", outbox.c.lease == claim.lease,
        )  # fmt: skip
        with told(), self._engine.begin() as connection:
            kept = connection.execute(update(outbox).where(held).values(**values)).rowcount == 1
            for keep in also:
                keep(connection, claim.id)
            if rest is None:
                well = update(destinations).where(self._own())
                if claim.probe:
                    well = well.values(failures=0, open_until=0)
                else:
                    well = well.where(destinations.c.failures > 0).values(failures=0)
                connection.execute(well)
            else:
                self._failed(connection, rest, probe=claim.probe)
        return kept

    def tally(self) -> Tally:
        """How the outbox fares now."""
        mine = outbox.c.destination == self._destination
        count = select(outbox.c.state, func.count(), func.min(outbox.c.created)).where(mine)
        standing = select(destinations.c.failures, destinations.c.open_until).where(self._own())
        with told(), self._engine.connect() as connection:
            found = connection.execute(count.group_by(outbox.c.state)).all()
            failures, open_until = connection.execute(standing).one_or_none() or (0, 0)
        states: tuple[State, ...] = ("waiting", "sending", "delivered", "failed", "dropped")
        counts: dict[State, int] = dict.fromkeys(states, 0)
        counts.update({state: number for state, number, _ in found})
        waiting = [oldest for state, _, oldest in found if state in (*_OPEN, "failed")]
        return Tally(counts, min(waiting, default=None), failures, open_until)

    def look(self, states: Sequence[State], *, limit: int, after: int = 0) -> list[Delivery]:
        """Deliveries in these states, oldest first, from the one after row `after`."""
        mine = and_(
            outbox.c.destination == self._destination, outbox.c.state.in_(states), outbox.c.id > after
        )
        query = select(*_SHOWN).where(mine).order_by(outbox.c.id).limit(limit)
        with told(), self._engine.connect() as connection:
            return [Delivery(*row) for row in connection.execute(query)]

    def one(self, number: int) -> Delivery | None:
        """One delivery by its row's id."""
        query = select(*_SHOWN).where(outbox.c.id == number, outbox.c.destination == self._destination)
        with told(), self._engine.connect() as connection:
            row = connection.execute(query).one_or_none()
        return Delivery(*row) if row else None

    def again(self, numbers: Sequence[int] | None, now: int) -> int:
        """Lets failed deliveries, or all that failed, be sent from now on; how many there were.

        Their tries start anew. What waits is also tried at once where it is named.
        """
        states = ("failed",) if numbers is None else ("failed", "waiting")
        fresh = {"state": "waiting", "due": now, "attempts": 0, "reason": ""}
        return self._change(numbers, states, fresh)

    def reopen(self, now: int) -> bool:
        """Lets a destination that is down be asked at once; False when it was not resting."""
        rested = update(destinations).where(self._own(), destinations.c.open_until > now)
        with told(), self._engine.begin() as connection:
            return connection.execute(rested.values(open_until=now)).rowcount == 1

    def drop(self, numbers: Sequence[int], reason: str = "") -> int:
        """Gives deliveries up that failed or wait, for a reason, if one is said; how many there were."""
        values = {"reason": reason[:_REASON_LENGTH]} if reason else {}
        return self._change(numbers, ("failed", "waiting"), {"state": "dropped", **values})

    def _change(self, numbers: Sequence[int] | None, states: Sequence[str], values: dict[str, Any]) -> int:
        where = [outbox.c.destination == self._destination, outbox.c.state.in_(states)]
        if numbers is not None:
            where.append(outbox.c.id.in_(numbers))
        with told(), self._engine.begin() as connection:
            return connection.execute(update(outbox).where(*where).values(**values)).rowcount

    def _own(self) -> ColumnElement[bool]:
        return destinations.c.name == self._destination

    def _register(self) -> None:
        """Makes the destination's row, once."""
        if self._known:
            return
        with told(), self._engine.connect() as connection:
            known = connection.execute(select(destinations.c.name).where(self._own())).first()
        if known is None:
            row = {"name": self._destination, "failures": 0, "open_until": 0}
            try:
                with told(), self._engine.begin() as connection:
                    connection.execute(insert(destinations).values(**row))
            except IntegrityError:
                pass  # another worker made it
        self._known = True

    def _expired(self, now: int) -> Any:
        """What a worker took and was not heard of since waits again."""
        gone = and_(outbox.c.state == "sending", outbox.c.lease <= now)
        mine = outbox.c.destination == self._destination
        return update(outbox).where(gone, mine).values(state="waiting", due=now, worker="", lease=0)

    def _taken(self, worker: str, now: int, until: int, *, probe: bool, among: int) -> Any:
        """One statement, so that no two workers take the same row; PostgreSQL passes over locked ones.

        Only the first `among` rows that are due are looked at closely, whatever a planner may think.
        """
        order = (outbox.c.attempts, outbox.c.due, outbox.c.id) if probe else (outbox.c.due, outbox.c.id)
        due = select(outbox.c.id).where(
            outbox.c.state == "waiting", outbox.c.due <= now, outbox.c.destination == self._destination
        )
        # the patient's oldest that is open; one that is held back itself holds back nobody
        mine = outbox.alias("mine")
        same = and_(mine.c.patient == outbox.c.patient, mine.c.destination == outbox.c.destination)
        oldest = select(func.min(mine.c.id)).where(same, mine.c.state.in_(_OPEN), ~_is_held(mine))
        chosen = (
            select(outbox.c.id)
            .where(outbox.c.id.in_(due.order_by(*order).limit(among)))
            .where(outbox.c.state == "waiting", outbox.c.id == oldest.scalar_subquery())
            .order_by(*order)
            .limit(1)
            .with_for_update(skip_locked=True)
            .scalar_subquery()
        )
        tried = outbox.c.attempts + (0 if probe else 1)
        taken = {"state": "sending", "worker": worker, "lease": until, "attempts": tried}
        changed = update(outbox).where(outbox.c.id == chosen).values(**taken)
        told = (outbox.c.id, outbox.c.submission, outbox.c.exam, outbox.c.patient, outbox.c.attempts)
        return changed.returning(*told)

    def _may_probe(self, connection: Connection, seen: int, until: int) -> bool:
        """Of all who want to probe, the first; the others wait until it has told, or is not heard of."""
        first = update(destinations).where(self._own(), destinations.c.open_until == seen)
        return connection.execute(first.values(open_until=until)).rowcount == 1

    def _failed(self, connection: Connection, rest: Rest, *, probe: bool) -> None:
        counted = destinations.c.failures + rest.weight
        more = update(destinations).where(self._own()).values(failures=counted)
        failures = connection.execute(more.returning(destinations.c.failures)).scalar_one()
        until = rest.until(failures)
        rests = update(destinations).where(self._own())
        if not probe:  # a longer rest stands, but for the probe's own time
            rests = rests.where(destinations.c.open_until < until)
        connection.execute(rests.values(open_until=until))


def _is_held(row: NamedFromClause) -> ColumnElement[bool]:
    """Whether an earlier version of the same examination has failed."""
    stuck = outbox.alias("stuck")
    same = and_(stuck.c.patient == row.c.patient, stuck.c.destination == row.c.destination)
    return exists().where(same, stuck.c.state == "failed", stuck.c.exam == row.c.exam, stuck.c.id < row.c.id)


_SHOWN: Final = tuple(outbox.c[name] for name in Delivery.__dataclass_fields__)
