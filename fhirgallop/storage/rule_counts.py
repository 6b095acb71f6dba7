"""How often rules were raised, shown and answered, by month: counts alone, no patient's data."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Final

from sqlalchemy import Connection, Engine, and_, func, insert, select, update
from sqlalchemy.exc import IntegrityError

from fhirgallop.storage.submissions import told
from fhirgallop.storage.tables import hook_cards, hook_feedback, rule_months

_TRIES: Final = 5


@dataclass(frozen=True, slots=True)
class RuleMonth:
    """How often one rule met one fate in one month (`2026-12`)."""

    month: str
    rule: str
    fate: str
    count: int


@dataclass(frozen=True, slots=True)
class AnswerMonth:
    """How often one answer was given in one month to cards of one kind; `shown` is that of the cards."""

    month: str
    shown: bytes
    outcome: str
    reason: str
    reason_system: str
    count: int


class RuleCounts:
    """Adds and reads; every method raises StorageError when the database failed."""

    def __init__(self, engine: Engine) -> None:
        self._engine = engine

    def add(self, month: str, fates: Mapping[tuple[str, str], int]) -> bool:
        """Adds to the counts of a month, by rule and fate; all of them or none.

        Returns:
            False when others kept adding the same new row; nothing was then added.
        """
        for _ in range(_TRIES):
            try:
                with told(), self._engine.begin() as connection:
                    for (rule, fate), times in sorted(fates.items()):
                        _add(connection, RuleMonth(month, rule, fate, times))
            except IntegrityError:  # another process made the row at the same moment
                continue
            return True
        return False

    def raised(self, since: str) -> Sequence[RuleMonth]:
        """The counts from a month on, by month and rule."""
        table = rule_months
        query = select(table.c.month, table.c.rule, table.c.fate, table.c.count)
        query = query.where(table.c.month >= since).order_by(table.c.month, table.c.rule, table.c.fate)
        with told(), self._engine.connect() as connection:
            return [RuleMonth(*row) for row in connection.execute(query)]

    def answers(self, since: str) -> Iterator[AnswerMonth]:
        """What was answered from a month on, counted by the rules of the card, the answer and its reason."""
        month = func.substr(hook_feedback.c.received, 1, 7)
        told_by = (hook_feedback.c.outcome, hook_feedback.c.reason, hook_feedback.c.reason_system)
        same = and_(
            hook_cards.c.card == hook_feedback.c.card, hook_cards.c.service == hook_feedback.c.service
        )
        query = (
            select(month, hook_cards.c.shown, *told_by, func.count())
            .join_from(hook_feedback, hook_cards, same)
            .where(month >= since)
            .group_by(month, hook_cards.c.shown, *told_by)
            .order_by(month)
        )
        with told(), self._engine.connect() as connection:
            for row in connection.execution_options(yield_per=1000).execute(query):
                yield AnswerMonth(*row)


def _add(connection: Connection, more: RuleMonth) -> None:
    table = rule_months
    same = (table.c.month == more.month, table.c.rule == more.rule, table.c.fate == more.fate)
    added = update(table).where(*same).values(count=table.c.count + more.count)
    if connection.execute(added).rowcount == 0:
        connection.execute(
            insert(table).values(month=more.month, rule=more.rule, fate=more.fate, count=more.count)
        )
