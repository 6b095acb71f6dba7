"""Deliveries as an operator looks at them: how they fare, what waits, what has failed and why."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import UTC, datetime
from typing import Final

from fhirgallop.cards.words import span
from fhirgallop.storage.outbox import Delivery, Outbox, State

AT_ONCE: Final = 50
NAMES: Final[dict[State, str]] = {
    "failed": "failed, wants you",
    "waiting": "waiting",
    "sending": "being sent",
    "delivered": "arrived",
    "dropped": "given up",
}


@dataclass(frozen=True, slots=True)
class Row:
    """One delivery; moments in words."""

    number: int
    exam: str
    state: State
    name: str
    tries: int
    since: str
    next_try: str
    reason: str


@dataclass(frozen=True, slots=True)
class Fares:
    """How all deliveries fare.

    Attributes:
        counts: how many of each state, by its name in words.
        oldest: for how long the oldest one has not arrived; empty when all have.
        rests: for how long the record system is still left alone; empty when it is not.
        failures: failures in a row.
        rows: a part of the deliveries; `after` where the next part begins, 0 when there is none.
        reasons: why deliveries of this part failed, with how many.
    """

    counts: dict[State, int]
    oldest: str
    rests: str
    failures: int
    rows: tuple[Row, ...]
    after: int
    reasons: tuple[tuple[str, int], ...]


def look(box: Outbox, states: Sequence[State], now: datetime, *, after: int) -> Fares:
    """How they fare now, with the deliveries in these states from the one after row `after`.

    Raises:
        StorageError: the database failed.
    """
    moment = int(now.timestamp() * 1000)
    tally = box.tally()
    found = box.look(states, limit=AT_ONCE + 1, after=after)
    rows = tuple(_row(one, moment) for one in found[:AT_ONCE])
    reasons: dict[str, int] = {}
    for row in rows:
        if row.state == "failed":
            reasons[row.reason] = reasons.get(row.reason, 0) + 1
    return Fares(
        tally.counts,
        _ago(tally.oldest, moment) if tally.oldest is not None else "",
        _ago(moment, tally.open_until) if tally.open_until > moment else "",
        tally.failures,
        rows,
        rows[-1].number if len(found) > AT_ONCE else 0,
        tuple(sorted(reasons.items(), key=lambda one: -one[1])),
    )


def _row(one: Delivery, now: int) -> Row:
    return Row(
        one.id,
        one.exam.removeprefix("urn:uuid:"),
        one.state,
        NAMES[one.state],
        one.attempts,
        datetime.fromtimestamp(one.created / 1000, tz=UTC).strftime("%Y-%m-%d %H:%M"),
        (f"in {_ago(now, one.due)}" if one.due > now else "now") if one.state == "waiting" else "",
        one.reason,
    )


def _ago(earlier: int, later: int) -> str:
    seconds = max(0, (later - earlier) // 1000)
    return span(seconds) if seconds else "a moment"
