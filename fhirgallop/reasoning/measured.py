"""Conditions on numbers worked out by haemodynamics: a classification, a check or a computed value."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from decimal import Decimal
from typing import Final

from fhirgallop.exam.context import Source, State
from fhirgallop.exam.entry import Measure
from fhirgallop.haemodynamics import CLASSIFICATIONS, COMPUTATIONS, Grade, Refusal
from fhirgallop.reasoning.atoms import Bound
from fhirgallop.reasoning.conditions import Condition, Support, View
from fhirgallop.reasoning.items import Ground, Item, place
from fhirgallop.reasoning.logic import Truth, all_of
from fhirgallop.reasoning.vocabulary import Window, kinds

Value = Decimal | bool | str
GRADE_OF_SUBJECT: Final = ("subject.grade", "subject.scale")


@dataclass(frozen=True, slots=True)
class Given:
    """One input: from a fact (number, answer, or present/absent), the subject's grade, or a constant."""

    name: str
    fact: str
    window: Window
    constant: Value | None = None

    def ground(self, view: View) -> Ground | None:
        """The item it is read from: of the subject's own reading where there is one, else the newest."""
        if self.fact in GRADE_OF_SUBJECT:
            return Ground(view.subject) if view.subject is not None and view.subject.grade else None
        subject = view.subject
        found = []
        for item in view.table.by_id.get(self.fact, ()):
            if item is subject:
                return Ground(item)
            if item.source is Source.EARLIER_EXAM or item.state not in (State.PRESENT, State.ABSENT):
                continue
            ground = place(item, self.window)
            if ground is not None and _same_reading(item, subject):
                found.append(ground)
        if subject is not None and sum(_of_another_panel(g.item, subject) for g in found) > 1:
            # Several readings, and nothing that says which of them goes with the subject.
            return None
        return min(found, key=_age, default=None)

    def value(self, item: Item) -> Value | None:
        """What the item gives."""
        if self.fact == "subject.grade":
            return Decimal(item.grade.low) if item.grade else None
        if self.fact == "subject.scale":
            return Decimal(item.grade.of) if item.grade else None
        if item.measure is not None:
            exact = not item.measure.comparator and item.measure.high is None
            return item.measure.value if exact else None
        if item.answers:
            return item.answers[0] if len(item.answers) == 1 else None
        return item.state is State.PRESENT if kinds()[item.id].kind == "sign" else None


def _age(ground: Ground) -> tuple[float, str]:
    age = ground.item.age
    return (float("inf") if age is None else age, ground.item.key)


def _same_reading(item: Item, subject: Item | None) -> bool:
    """Numbers of one panel go together by instance; a finding of another kind goes with the only reading."""
    if subject is None or item.instance == subject.instance or not (item.of_exam and subject.of_exam):
        return True
    return _of_another_panel(item, subject)


def _of_another_panel(item: Item, subject: Item) -> bool:
    both = item.of_exam and subject.of_exam
    return both and item.id.partition(".")[0] != subject.id.partition(".")[0]


def _inputs(given: tuple[Given, ...], view: View) -> tuple[dict[str, Value], Support, list[str]]:
    values: dict[str, Value] = {}
    grounds, missing = [], []
    for entry in given:
        if entry.constant is not None:
            values[entry.name] = entry.constant
            continue
        ground = entry.ground(view)
        value = entry.value(ground.item) if ground else None
        if ground is None:
            missing.append(entry.fact)
        elif value is not None:
            # What was recorded without an exact value is there; nobody is asked for it again.
            values[entry.name] = value
            grounds.append(ground)
    return values, frozenset(grounds), missing


@dataclass(frozen=True, slots=True, eq=False)
class Judged:
    """A classification of haemodynamics that gives one of `answers`; default edition when empty."""

    classification: str
    given: tuple[Given, ...]
    answers: frozenset[str]
    edition: str = ""

    def judge(self, view: View) -> Truth:
        """True, false or unknown."""
        values, grounds, _ = _inputs(self.given, view)
        if not grounds:
            return Truth.UNKNOWN
        grade = CLASSIFICATIONS[self.classification](edition=self.edition, cutoffs=None, **values)
        if not isinstance(grade, Grade) or not grade.possible:
            return Truth.UNKNOWN
        if self.answers.issuperset(grade.possible):
            return Truth.TRUE
        return Truth.FALSE if self.answers.isdisjoint(grade.possible) else Truth.UNKNOWN

    def supports(self, view: View, truth: Truth) -> tuple[Support, ...]:
        """Smallest sets of grounds that make it `truth`."""
        return (_inputs(self.given, view)[1],) if self.judge(view) is truth else ()

    def unknowns(self, view: View) -> Iterator[str]:
        """The data that are unknown here."""
        if self.judge(view) is Truth.UNKNOWN:
            yield from _inputs(self.given, view)[2]

    def atoms(self) -> Iterator[Condition]:
        """Every elementary condition in it."""
        yield self


@dataclass(frozen=True, slots=True, eq=False)
class Computed:
    """A computation of haemodynamics whose result keeps within bounds."""

    computation: str
    given: tuple[Given, ...]
    bounds: tuple[Bound, ...]

    def judge(self, view: View) -> Truth:
        """True, false or unknown."""
        values, grounds, _ = _inputs(self.given, view)
        if not grounds:
            return Truth.UNKNOWN
        result = COMPUTATIONS[self.computation](**values)
        if isinstance(result, Refusal):
            return Truth.UNKNOWN
        measure = Measure(result.value, result.unit)
        return all_of(bound.holds(measure) for bound in self.bounds)

    def supports(self, view: View, truth: Truth) -> tuple[Support, ...]:
        """Smallest sets of grounds that make it `truth`."""
        return (_inputs(self.given, view)[1],) if self.judge(view) is truth else ()

    def unknowns(self, view: View) -> Iterator[str]:
        """The data that are unknown here."""
        if self.judge(view) is Truth.UNKNOWN:
            yield from _inputs(self.given, view)[2]

    def atoms(self) -> Iterator[Condition]:
        """Every elementary condition in it."""
        yield self
