"""What the CDS Hooks services remember: memories by patient, cards given out, feedback.

Patients, encounters and hook instances are known here by digests only. Values come and go as bytes; what they
mean is the caller's.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, fields

from sqlalchemy import Connection, Engine, and_, insert, select, update
from sqlalchemy.exc import IntegrityError

from fhirgallop.storage.submissions import Also, told
from fhirgallop.storage.tables import hook_cards, hook_feedback, hook_instances, hook_memories

_AT_ONCE = 500


@dataclass(frozen=True, slots=True)
class KeptMemory:
    """A patient's memory and its version; version 0 is one that was never kept."""

    patient: str
    version: int
    memory: bytes


@dataclass(frozen=True, slots=True)
class KeptCard:
    """A card that was given out."""

    card: str
    service: str
    patient: str
    encounter: str
    shown: bytes
    at: str


@dataclass(frozen=True, slots=True)
class KeptFeedback:
    """One report of a client; `suggestions` are the accepted ones, as JSON."""

    key: str
    service: str
    card: str
    matched: bool
    outcome: str
    suggestions: bytes
    reason: str
    reason_system: str
    comment: str
    at: str
    received: str


@dataclass(frozen=True, slots=True)
class Tally:
    """How one report came out; `shown` is that of its card, None where the card is not known here."""

    shown: bytes | None
    outcome: str
    reason: str
    reason_system: str


_CARD = tuple(field.name for field in fields(KeptCard))
_FEEDBACK = tuple(field.name for field in fields(KeptFeedback))


class HookStore:
    """Reads and writes; every write is one transaction.

    Every method raises StorageError when the database failed; nothing of that call was then kept.
    """

    def __init__(self, engine: Engine) -> None:
        self._engine = engine

    def memory(self, patient: str) -> KeptMemory | None:
        """What is remembered of a patient."""
        table = hook_memories
        query = select(table.c.patient, table.c.version, table.c.memory).where(table.c.patient == patient)
        with told(), self._engine.connect() as connection:
            row = connection.execute(query).one_or_none()
        return KeptMemory(*row) if row else None

    def before(self, instance: str) -> bytes | None:
        """The memory as it was before this hook instance was first answered."""
        query = select(hook_instances.c.memory).where(hook_instances.c.instance == instance)
        with told(), self._engine.connect() as connection:
            found: bytes | None = connection.scalar(query)
        return found

    def keep(
        self,
        memory: KeptMemory,
        *,
        instance: str = "",
        before: bytes = b"",
        cards: Sequence[KeptCard] = (),
        also: Sequence[Also] = (),
    ) -> bool:
        """Stores a patient's memory as the version after `memory.version`, with the cards given out.

        False when another request changed it first; then nothing is kept. Cards and instances that are
        already known stay as they were. What is to be kept `also` comes last in the same transaction, with 0
        for a row: it is not called where nothing is kept.
        """
        try:
            with told(), self._engine.begin() as connection:
                if not _advanced(connection, memory):
                    return False
                if instance and not _known(connection, instance):
                    at = max((card.at for card in cards), default="")
                    row = {"instance": instance, "patient": memory.patient, "memory": before, "at": at}
                    connection.execute(insert(hook_instances).values(**row))
                _add_cards(connection, cards)
                for one in also:
                    one(connection, 0)
        except IntegrityError:
            return False
        return True

    def cards(self, ids: Sequence[str]) -> dict[str, KeptCard]:
        """The cards with these ids that are known here."""
        found: dict[str, KeptCard] = {}
        columns = [hook_cards.c[name] for name in _CARD]
        with told(), self._engine.connect() as connection:
            for start in range(0, len(ids), _AT_ONCE):
                some = ids[start : start + _AT_ONCE]
                query = select(*columns).where(hook_cards.c.card.in_(some))
                found |= {row.card: KeptCard(*row) for row in connection.execute(query)}
        return found

    def new_feedback(self, keys: Sequence[str]) -> set[str]:
        """Those of the keys that no report is kept under yet."""
        with told(), self._engine.connect() as connection:
            return set(keys) - _known_keys(connection, keys)

    def add_feedback(self, reports: Sequence[KeptFeedback]) -> bool:
        """Adds reports, all of them or none; those that are kept already are not added again.

        False when another request was adding one of them at the same moment; then nothing is kept.
        """
        by_key = {report.key: report for report in reports}
        try:
            with told(), self._engine.begin() as connection:
                known = _known_keys(connection, list(by_key))
                new = [report for key, report in by_key.items() if key not in known]
                rows = [{name: getattr(report, name) for name in _FEEDBACK} for report in new]
                if rows:
                    connection.execute(insert(hook_feedback), rows)
        except IntegrityError:
            return False
        return True

    def keep_cards(self, cards: Sequence[KeptCard], *also: Also) -> bool:
        """Keeps cards that were given out without a memory; those that are known stay as they were.

        False when another request kept one of them at the same moment; it is then kept.
        """
        try:
            with told(), self._engine.begin() as connection:
                _add_cards(connection, cards)
                for one in also:
                    one(connection, 0)
        except IntegrityError:
            return False
        return True

    def feedback_to(self, cards: Sequence[str]) -> Sequence[KeptFeedback]:
        """What was reported of these cards, the earliest first."""
        columns = [hook_feedback.c[name] for name in _FEEDBACK]
        query = select(*columns).where(hook_feedback.c.card.in_(cards)).order_by(hook_feedback.c.id)
        with told(), self._engine.connect() as connection:
            return [KeptFeedback(*row) for row in connection.execute(query)]

    def tallies(self) -> Iterator[Tally]:
        """Every report, one by one, the earliest first."""
        same = (hook_cards.c.card == hook_feedback.c.card, hook_cards.c.service == hook_feedback.c.service)
        columns = (hook_feedback.c[name] for name in ("outcome", "reason", "reason_system"))
        query = select(hook_cards.c.shown, *columns).outerjoin_from(hook_feedback, hook_cards, and_(*same))
        query = query.order_by(hook_feedback.c.id)
        with told(), self._engine.connect() as connection:
            for row in connection.execution_options(yield_per=1000).execute(query):
                yield Tally(*row)


def _advanced(connection: Connection, memory: KeptMemory) -> bool:
    table = hook_memories
    values = {"version": memory.version + 1, "memory": memory.memory}
    if memory.version == 0:
        connection.execute(insert(table).values(patient=memory.patient, **values))
        return True
    same = (table.c.patient == memory.patient, table.c.version == memory.version)
    return connection.execute(update(table).where(*same).values(**values)).rowcount == 1


def _known(connection: Connection, instance: str) -> bool:
    query = select(hook_instances.c.instance).where(hook_instances.c.instance == instance)
    return connection.scalar(query) is not None


def _add_cards(connection: Connection, cards: Sequence[KeptCard]) -> None:
    ids = [card.card for card in cards]
    known = set(connection.scalars(select(hook_cards.c.card).where(hook_cards.c.card.in_(ids))))
    rows = [{name: getattr(card, name) for name in _CARD} for card in cards if card.card not in known]
    if rows:
        connection.execute(insert(hook_cards), rows)


def _known_keys(connection: Connection, keys: Sequence[str]) -> set[str]:
    found: set[str] = set()
    for start in range(0, len(keys), _AT_ONCE):
        some = keys[start : start + _AT_ONCE]
        found |= set(connection.scalars(select(hook_feedback.c.key).where(hook_feedback.c.key.in_(some))))
    return found
