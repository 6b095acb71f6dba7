"""Deletes what was kept long enough, and all that is kept of one patient.

The audit trail keeps that there was an access or a deletion; patients stand there by digest alone, which
tells nothing to whom does not know their identifier.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Collection, Iterable, Mapping, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from typing import Final

from sqlalchemy import (
    ColumnElement,
    Connection,
    Engine,
    Integer,
    String,
    Table,
    and_,
    bindparam,
    delete,
    exists,
    func,
    or_,
    select,
    true,
    tuple_,
)

from fhirgallop.storage.submissions import Also, told
from fhirgallop.storage.tables import (
    audit,
    batch_results,
    batches,
    draft_samples,
    hook_cards,
    hook_feedback,
    hook_instances,
    hook_memories,
    idempotent_answers,
    outbox,
    resource_identifiers,
    resources,
    sessions,
    submissions,
    used_tokens,
)

# in one transaction of `prune`: others never wait long for it
_ROWS: Final = 100
_STILL_TO_BE_SENT: Final = ("waiting", "sending", "failed")
_FINISHED: Final = ("done", "cancelled")


@dataclass(frozen=True, slots=True)
class Keeping:
    """How long what is kept, in days (answers: in hours); 0 is for ever.

    Attributes:
        exams: examinations and coded resources, after their newest version.
        cards: cards, answers to them, and the memories of both.
        batches: finished batches.
        audit: the audit trail.
        answers: answers by the sender's own key.
        samples: records that were brought in beside a draft of a map.
    """

    exams: int = 0
    cards: int = 0
    batches: int = 0
    audit: int = 0
    answers: int = 0
    samples: int = 0


def prune(engine: Engine, keeping: Keeping, now: datetime) -> Mapping[str, int]:
    """Deletes what was kept long enough, in many small transactions.

    Never an examination that has a delivery waiting, under way, or failed and not yet given up.

    Returns:
        Rows deleted, by table.

    Raises:
        StorageError: the database failed; what was deleted until then stays deleted.
    """
    gone: Counter[str] = Counter()
    moment = _ms(now)
    if keeping.exams:
        gone.update(_old_exams(engine, now - timedelta(days=keeping.exams)))
    if keeping.cards:
        gone.update(_old_cards(engine, _instant(now - timedelta(days=keeping.cards))))
    old: list[tuple[Table, ColumnElement[bool]]] = [
        (used_tokens, used_tokens.c.until < moment),
        (sessions, sessions.c.until < moment),
    ]
    if keeping.answers:
        before = _ms(now - timedelta(hours=keeping.answers))
        old.append((idempotent_answers, idempotent_answers.c.at < before))
    if keeping.batches:
        before = _ms(now - timedelta(days=keeping.batches))
        old.append((batches, and_(batches.c.state.in_(_FINISHED), batches.c.created < before)))
    if keeping.samples:
        old.append((draft_samples, draft_samples.c.at < _ms(now - timedelta(days=keeping.samples))))
    if keeping.audit:
        old.append((audit, audit.c.at < _ms(now - timedelta(days=keeping.audit))))
    for table, condition in old:
        gone[table.name] += _delete_slowly(engine, table, condition)
    return +gone


def forget(engine: Engine, patients: Collection[str], *also: Also) -> Mapping[str, int]:
    """Deletes all that is kept of a patient, in one transaction; also what still waits to be delivered.

    What cannot be told apart by patient goes as a whole: answers by key that tell of several patients (sent
    again, such a request is coded again, with the same result), and the sample records beside drafts of maps,
    which the clinic has itself. The audit trail stays.

    Args:
        engine: of the database.
        patients: every digest that the patient is known by here.
        also: called with the connection and 0, for the audit record of the deletion.

    Returns:
        Rows deleted, by table.

    Raises:
        StorageError: the database failed; nothing was deleted.
    """
    known = sorted(patients)
    theirs = submissions.c.patient.in_(known)
    rows = select(submissions.c.id).where(theirs)
    coded = or_(resources.c.patient.in_(known), resources.c.submission.in_(rows))
    cards = select(hook_cards.c.card).where(hook_cards.c.patient.in_(known))
    chosen: list[tuple[Table, ColumnElement[bool]]] = [
        (resource_identifiers, resource_identifiers.c.resource.in_(select(resources.c.id).where(coded))),
        (resources, coded),
        (outbox, or_(outbox.c.patient.in_(known), outbox.c.submission.in_(rows))),
        (batch_results, batch_results.c.patient.in_(known)),
        (submissions, theirs),
        (idempotent_answers, idempotent_answers.c.patient.in_([*known, ""])),
        (draft_samples, true()),
        (hook_feedback, hook_feedback.c.card.in_(cards)),
        (hook_cards, hook_cards.c.patient.in_(known)),
        (hook_instances, hook_instances.c.patient.in_(known)),
        (hook_memories, hook_memories.c.patient.in_(known)),
    ]
    with told(), engine.begin() as connection:
        _hold_examinations(connection)
        gone = _delete(connection, chosen)
        for keep in also:
            keep(connection, 0)
    return +gone


def unfinished_batches(engine: Engine) -> int:
    """Batches whose records are still here as they were sent, whoever they are of.

    Raises:
        StorageError: the database failed.
    """
    query = select(func.count()).select_from(batches).where(func.length(batches.c.request) > 0)
    with told(), engine.connect() as connection:
        return connection.scalar(query) or 0


def clear_away(engine: Engine) -> bool:
    """Takes what was deleted out of the database's files as well, as far as the database can.

    SQLite's file is written anew, without any trace. PostgreSQL frees the space to be written over; its logs
    and backups go their own way.

    Returns:
        False when somebody still reads what was there before; it is then to be tried again.

    Raises:
        StorageError: the database failed, or was busy.
    """
    with told(), engine.connect() as opened:
        connection = opened.execution_options(isolation_level="AUTOCOMMIT")
        connection.exec_driver_sql("VACUUM")
        if engine.dialect.name != "sqlite":
            return True
        row = connection.exec_driver_sql("PRAGMA wal_checkpoint(TRUNCATE)").one()
        return not row[0]


def _old_exams(engine: Engine, before: datetime) -> Counter[str]:
    gone: Counter[str] = Counter()
    newer, sent, limit = submissions.alias("newer"), submissions.alias("sent"), _instant(before)
    still = select(outbox.c.id).join(sent, sent.c.id == outbox.c.submission)
    still = still.where(sent.c.exam == submissions.c.exam, outbox.c.state.in_(_STILL_TO_BE_SENT))
    place = (submissions.c.received, submissions.c.id)
    over = select(*place, submissions.c.exam).where(
        submissions.c.received < limit,
        tuple_(*place) > tuple_(bindparam("received", type_=String), bindparam("row", type_=Integer)),
        ~exists().where(newer.c.exam == submissions.c.exam, newer.c.received >= limit),
        ~still.correlate(submissions).exists(),
    ).order_by(*place).limit(_ROWS)  # fmt: skip
    after, more = ("", 0), True
    while more:
        with told(), engine.begin() as connection:
            _hold_examinations(connection)
            found = connection.execute(over, {"received": after[0], "row": after[1]}).all()
            if found:
                gone.update(_delete_exams(connection, sorted({row.exam for row in found})))
        more = len(found) == _ROWS
        after = (found[-1].received, found[-1].id) if found else after
    # what came over a FHIR address belongs to no examination
    later = resources.alias("later")
    same = [later.c[name] == resources.c[name] for name in ("fhir_id", "type", "edition")]
    alone = and_(
        resources.c.submission.is_(None),
        resources.c.updated < _ms(before),
        ~exists().where(*same, later.c.updated >= _ms(before)),
    )
    gone[resources.name] += _delete_slowly(engine, resources, alone)
    return gone


def _hold_examinations(connection: Connection) -> None:
    """Nobody adds an examination before the end of this transaction.

    Else a version that comes between the choice and the deletion would go too, or would stay without those of
    its resources that it has from the version before.
    """
    if connection.dialect.name == "sqlite":
        connection.exec_driver_sql("BEGIN IMMEDIATE")
    else:
        connection.exec_driver_sql(f"LOCK TABLE {submissions.name} IN SHARE ROW EXCLUSIVE MODE")


def _delete_exams(connection: Connection, exams: Sequence[str]) -> Counter[str]:
    theirs = submissions.c.exam.in_(exams)
    rows = select(submissions.c.id).where(theirs)
    return _delete(
        connection,
        [(resources, resources.c.submission.in_(rows)), (outbox, outbox.c.submission.in_(rows)),
         (submissions, theirs)],
    )  # fmt: skip


def _delete(connection: Connection, chosen: Iterable[tuple[Table, ColumnElement[bool]]]) -> Counter[str]:
    gone: Counter[str] = Counter()
    for table, condition in chosen:
        gone[table.name] += connection.execute(delete(table).where(condition)).rowcount
    return gone


def _old_cards(engine: Engine, before: str) -> Counter[str]:
    """Feedback goes with its card, without which nobody knows what it was about."""
    old = select(hook_cards.c.card).where(hook_cards.c.at < before)
    unknown = ~hook_feedback.c.card.in_(select(hook_cards.c.card))
    quiet = ~exists().where(hook_cards.c.patient == hook_memories.c.patient)
    gone: Counter[str] = Counter()
    for table, condition in (
        (hook_feedback, or_(hook_feedback.c.card.in_(old), and_(hook_feedback.c.received < before, unknown))),
        (hook_cards, hook_cards.c.at < before),
        (hook_instances, hook_instances.c.at < before),
        (hook_memories, quiet),
    ):
        gone[table.name] += _delete_slowly(engine, table, condition)
    return gone


def _delete_slowly(engine: Engine, table: Table, condition: ColumnElement[bool]) -> int:
    """A few rows at a time, until none is left."""
    (key,) = table.primary_key
    some = select(key).where(condition).limit(_ROWS)
    total = 0
    while True:
        with told(), engine.begin() as connection:
            deleted = connection.execute(delete(table).where(key.in_(some))).rowcount
        total += deleted
        if deleted < _ROWS:
            return total


def _ms(moment: datetime) -> int:
    return int(moment.timestamp() * 1000)


def _instant(moment: datetime) -> str:
    """As the moments in the tables are written, so that text sorts as time."""
    return moment.astimezone(UTC).strftime("%Y-%m-%dT%H:%M:%SZ")
