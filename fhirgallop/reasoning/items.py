"""Items: the entries of today's examination and the facts of the chart, side by side under their ids."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from datetime import UTC, datetime
from functools import lru_cache

from fhirgallop.exam.context import Context, Fact, Source, State
from fhirgallop.exam.entry import Entry, Grade, Measure, Qualifier
from fhirgallop.exam.exam import Exam
from fhirgallop.exam.presence import Presence
from fhirgallop.reasoning.vocabulary import Window, ancestors, kinds

_STATES: Mapping[Presence, State] = {Presence.PRESENT: State.PRESENT, Presence.ABSENT: State.ABSENT}


@dataclass(frozen=True, slots=True, eq=False)
class Item:
    """One entry or fact; there is one object of each in a table, so identity is equality.

    Attributes:
        key: what it says and where, as text: the same for the same content, whatever the order.
        age: seconds before the examination (negative: after it); None when its time is unknown.
        clock: its time names a time of day, or it belongs to the examination.
        encounter: True in the same encounter, False in another, None unknown.
        place: local fields or chart reference, for the reader.
        of_exam: it is an entry of today's examination.
    """

    key: str
    id: str
    state: State
    source: Source
    answers: tuple[str, ...]
    measure: Measure | None
    qualifiers: tuple[Qualifier, ...]
    instance: str
    time: str
    age: int | None
    clock: bool
    encounter: bool | None
    low_trust: bool
    place: str
    of_exam: bool

    def values(self, axis: str) -> tuple[str, ...]:
        """The values recorded on an axis."""
        return tuple(q.value for q in self.qualifiers if q.axis == axis and q.value)

    @property
    def grade(self) -> Grade | None:
        """The loudness grade, if recorded."""
        return next((q.grade for q in self.qualifiers if q.grade is not None), None)


@dataclass(frozen=True, slots=True)
class Ground:
    """An item in the use of one condition, with what weakens it there."""

    item: Item
    stale: bool = False
    imprecise: bool = False

    @property
    def steps(self) -> int:
        """How many steps of strength this costs."""
        return int(self.stale) + int(self.imprecise or self.item.low_trust)


@dataclass(frozen=True, slots=True)
class ItemTable:
    """All usable items by id, parents included, each list in the order of the keys.

    `unusable` are facts that lie in the future, or carry a number in another unit than their id's.
    """

    by_id: Mapping[str, tuple[Item, ...]]
    unusable: tuple[Item, ...]


def collect(exam: Exam, context: Context) -> ItemTable:
    """Lay entries and facts side by side; withdrawn entries are left out."""
    reference = moment(exam.time.start) if exam.time.precise_to_day else None
    now = context.now.timestamp()
    origin = reference if reference is not None else now
    found: dict[str, list[Item]] = {}
    unusable: list[Item] = []
    entries = exam.entries if exam.status != "entered-in-error" else ()
    for entry in entries:
        state = _STATES.get(entry.presence)
        if state is not None and not entry.withdrawn:
            item = _of_entry(entry, state, exam.time.start, origin)
            if item.age is not None and origin - item.age > now:
                unusable.append(item)
            else:
                _put(item, found, unusable)
    encounter = exam.encounter.value if exam.encounter else ""
    for fact in context.facts:
        item = _of_fact(fact, origin, encounter)
        if item.age is not None and origin - item.age > now:
            unusable.append(item)
        else:
            _put(item, found, unusable)
    by_id = {id_: (items[0],) if len(items) == 1 else _distinct(items) for id_, items in found.items()}
    return ItemTable(by_id, _distinct(unusable))


def _distinct(items: list[Item]) -> tuple[Item, ...]:
    """Each item once, in the order of the keys."""
    by_key = {item.key: item for item in items}
    return tuple(by_key[key] for key in sorted(by_key))


def _put(item: Item, found: dict[str, list[Item]], unusable: list[Item]) -> None:
    id_, measure = item.id, item.measure
    kind = kinds().get(id_)
    if kind is None or (measure is not None and measure.unit != kind.unit):
        unusable.append(item)
        return
    found.setdefault(id_, []).append(item)
    if item.state is State.PRESENT:
        for parent in ancestors().get(id_, ()):
            found.setdefault(parent, []).append(item)


def _of_entry(entry: Entry, state: State, time: str, origin: float) -> Item:
    """An entry is as old as the examination, unless the form gave it a time of its own (an older echo)."""
    own = moment(entry.time)
    described = ""
    if entry.answers or entry.measure is not None or entry.qualifiers:
        described = _said(entry.answers, entry.measure, entry.qualifiers)
    return Item(
        key=f"{entry.finding}|exam|{entry.instance}|{described}|{state}",
        id=entry.finding,
        state=state,
        source=Source.EXAM,
        answers=entry.answers,
        measure=entry.measure,
        qualifiers=entry.qualifiers,
        instance=entry.instance,
        time=entry.time or time,
        age=0 if own is None else int(origin - own),
        clock=own is None or len(entry.time) > 10,
        encounter=True if own is None else None,
        low_trust=False,
        place=", ".join(entry.fields),
        of_exam=True,
    )


def _of_fact(fact: Fact, origin: float, encounter: str) -> Item:
    at = moment(fact.time)
    return Item(
        key=f"{fact.id}|{fact.source}|{fact.time}|{fact.reference}|"
        f"{_said(fact.answers, fact.measure, fact.qualifiers)}|{fact.state}",
        id=fact.id,
        state=fact.state,
        source=fact.source,
        answers=fact.answers,
        measure=fact.measure,
        qualifiers=fact.qualifiers,
        instance="",
        time=fact.time,
        age=None if at is None else int(origin - at),
        clock=len(fact.time) > 10,
        encounter=fact.encounter == encounter if fact.encounter and encounter else None,
        low_trust=fact.low_trust,
        place=fact.reference,
        of_exam=False,
    )


def _said(answers: tuple[str, ...], measure: Measure | None, qualifiers: tuple[Qualifier, ...]) -> str:
    number = "" if measure is None else f"{measure.comparator}{measure.value}-{measure.high}"
    described = ";".join(sorted(f"{q.axis}={q.value or q.grade or q.text}" for q in qualifiers))
    return f"{','.join(sorted(answers))}|{number}|{described}"


@lru_cache(maxsize=4096)
def moment(text: str) -> float | None:
    """Seconds since 1970 of a FHIR dateTime; a partial one is taken at its start, so it counts as older."""
    if not text:
        return None
    padded = text + "-01-01"[len(text) - 4 :] if len(text) in (4, 7) else text
    try:
        found = datetime.fromisoformat(padded)
    except ValueError:
        return None
    return (found if found.tzinfo else found.replace(tzinfo=UTC)).timestamp()


def place(item: Item, window: Window) -> Ground | None:
    """The item as a ground inside the window, weakened outside it, or None where outside drops it."""
    if item.of_exam or window.within is None:
        return Ground(item)
    within = window.within
    for severity, seconds in window.by_severity:
        if severity in item.values("severity"):
            within = seconds
    inside = item.age is not None and item.age <= within
    if window.same_encounter:
        inside = inside and item.encounter is not False and item.age is not None and -item.age <= within
    if inside:
        # Without a time of day nobody knows whether it was before or after what was heard.
        return Ground(item, imprecise=window.same_encounter and not item.clock)
    return None if window.drops else Ground(item, stale=True)


def newest(grounds: list[Ground], slack: int) -> Iterator[Ground]:
    """The newest grounds, with those no more than `slack` seconds older, and those of unknown time."""
    ages = [g.item.age for g in grounds if g.item.age is not None]
    youngest = min(ages, default=0)
    for ground in grounds:
        if ground.item.age is None or ground.item.age - youngest <= slack:
            yield ground
