"""Atoms: the elementary questions of conditions, each about one id or about the very subject of a rule.

Facts that disagree about the same time leave the answer unknown; a later one replaces an earlier one.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from decimal import Decimal
from functools import partial
from typing import Final

from fhirgallop.exam.context import Source, State
from fhirgallop.exam.entry import Measure
from fhirgallop.reasoning.conditions import MAX_SUPPORTS, Condition, Support, View
from fhirgallop.reasoning.items import Ground, Item, newest, place
from fhirgallop.reasoning.logic import Truth, all_of
from fhirgallop.reasoning.vocabulary import Cutoff, Window

# What is said of another valve, side or site is not said of this one.
IDENTITY: Final = frozenset({"valve", "side", "chamber", "site", "bp-site", "method", "posture", "exertion"})
# "Not heard" without a place is said of every place, but not of every way of listening.
_METHOD: Final = frozenset({"method"})
# Names that an examiner may give to a finding: there is nothing to go and look for when nobody gave one.
NAMES: Final = frozenset({"eponym", "meaning", "suspected-lesion"})
# Not a property but a time: `matching: [study]` takes only what was found together with the subject.
STUDY: Final = "study"
_SAYS_NOTHING: Final = frozenset(
    {"other", "undetermined", "unknown", "not-done", "not-assessable", "indeterminate", "not-examined"}
)
_DECIDED: Final = (State.PRESENT, State.ABSENT)


@dataclass(frozen=True, slots=True)
class Bound:
    """A side of a threshold: `op` is one of above, at-least, at-most, below."""

    op: str
    cutoff: Cutoff

    def holds(self, measure: Measure) -> Truth:
        """Judged on the whole interval that was recorded."""
        low, high = _interval(measure)
        limit = self.cutoff.value
        if self.op in ("above", "at-least"):
            if low is not None and (low > limit or (low == limit and self.op == "at-least")):
                return Truth.TRUE
            if high is not None and (high < limit or (high == limit and self.op == "above")):
                return Truth.FALSE
            return Truth.UNKNOWN
        return ~Bound("at-least" if self.op == "below" else "above", self.cutoff).holds(measure)


def _interval(measure: Measure) -> tuple[Decimal | None, Decimal | None]:
    low, high = measure.value, measure.high if measure.high is not None else measure.value
    if measure.comparator.startswith("<"):
        return None, high
    if measure.comparator.startswith(">"):
        return low, None
    return low, high


@dataclass(frozen=True, slots=True)
class Having:
    """A property asked of an item: one of `values` on an axis, or a grade within `low` and `high` of `of`."""

    axis: str
    values: frozenset[str] = frozenset()
    low: int | None = None
    high: int | None = None
    of: int = 0

    def holds(self, item: Item) -> Truth:
        """True or false only when the property was recorded."""
        if self.axis == "grade":
            return self._grade_holds(item)
        recorded = item.values(self.axis)
        if not recorded:
            return Truth.UNKNOWN
        if not self.values.isdisjoint(recorded):
            return Truth.TRUE
        return Truth.UNKNOWN if _SAYS_NOTHING.issuperset(recorded) else Truth.FALSE

    def _grade_holds(self, item: Item) -> Truth:
        grade = item.grade
        if grade is None or (self.of and grade.of != self.of):
            return Truth.UNKNOWN
        above = _within(grade.low, grade.high, self.low, None)
        return all_of((above, _within(grade.low, grade.high, None, self.high)))


def _within(low: int, high: int, least: int | None, most: int | None) -> Truth:
    if least is not None and low < least:
        return Truth.FALSE if high < least else Truth.UNKNOWN
    if most is not None and high > most:
        return Truth.FALSE if low > most else Truth.UNKNOWN
    return Truth.TRUE


@dataclass(frozen=True, slots=True, eq=False)
class Atom:
    """One question about one id; each field is described in rules/README.md."""

    fact: str
    window: Window
    want: str = "present"
    answers: frozenset[str] = frozenset()
    against: frozenset[str] | None = None
    bounds: tuple[Bound, ...] = ()
    having: tuple[Having, ...] = ()
    sources: frozenset[str] = frozenset()
    matching: tuple[str, ...] = ()
    slack: int = 3600

    @property
    def plain(self) -> bool:
        """True when it only asks whether a sign is present."""
        further = self.having or self.answers or self.bounds or self.sources or self.matching
        return self.want == "present" and not further

    def judge(self, view: View) -> Truth:
        """True, false or unknown."""
        truth = self._decide(view)[0]
        return view.assumed.get(self.fact, truth) if truth is Truth.UNKNOWN else truth

    def supports(self, view: View, truth: Truth) -> tuple[Support, ...]:
        """Smallest sets of grounds that make it `truth`."""
        known, found = self._decide(view)
        return found if known is truth else ()

    def unknowns(self, view: View) -> Iterator[str]:
        """The data that are unknown here."""
        if self._decide(view)[0] is Truth.UNKNOWN:
            yield self._missing_axis(view) or self.fact

    def atoms(self) -> Iterator[Condition]:
        """Every elementary condition in it."""
        yield self

    def test(self, item: Item, subject: Item | None = None) -> Truth | None:
        """What one item says: None when it is about something else."""
        for having in self.having:
            if having.axis in IDENTITY and having.holds(item) is Truth.FALSE:
                return None
        for axis in self.matching:
            same = _same_study if axis == STUDY else partial(_shared, axis)
            shared = same(item, subject)
            if shared is Truth.FALSE:
                return None
            if shared is Truth.UNKNOWN:
                return Truth.UNKNOWN
        return self._said_by(item)

    def _said_by(self, item: Item) -> Truth:
        if self.having:
            elsewhere = _METHOD if item.state is State.ABSENT else IDENTITY
            if any(h.axis in elsewhere and h.holds(item) is Truth.UNKNOWN for h in self.having):
                # It may be about another valve, side or site.
                return Truth.UNKNOWN
        if self.want == "ever":
            if item.state not in (State.PRESENT, State.HISTORY):
                return Truth.FALSE if item.state is State.ABSENT else Truth.UNKNOWN
        elif item.state not in _DECIDED:
            return Truth.UNKNOWN
        elif self.want == "recorded":
            return Truth.TRUE
        elif self.want == "absent":
            return Truth.TRUE if item.state is State.ABSENT else Truth.FALSE
        elif item.state is State.ABSENT:
            return Truth.FALSE
        found = [having.holds(item) for having in self.having]
        if self.answers:
            found.append(self._answered(item))
        if self.bounds:
            measure = item.measure
            found += (bound.holds(measure) if measure else Truth.UNKNOWN for bound in self.bounds)
        return all_of(found)

    def _answered(self, item: Item) -> Truth:
        if not self.answers.isdisjoint(item.answers):
            return Truth.TRUE
        if self.against is not None:
            return Truth.UNKNOWN if self.against.isdisjoint(item.answers) else Truth.FALSE
        return Truth.UNKNOWN if _SAYS_NOTHING.issuperset(item.answers) else Truth.FALSE

    def unnamed(self, item: Item) -> bool:
        """True when it asks for a name that nobody gave the item."""
        return any(h.axis in NAMES and h.holds(item) is Truth.UNKNOWN for h in self.having)

    def grounds(self, view: View) -> list[Ground]:
        """The items in question, each placed in the window."""
        found = []
        for item in view.table.by_id.get(self.fact, ()):
            if (item.source in self.sources) if self.sources else item.source is not Source.EARLIER_EXAM:
                ground = place(item, self.window)
                if ground is not None:
                    found.append(ground)
        return found

    def _decide(self, view: View) -> tuple[Truth, tuple[Support, ...]]:
        if self.fact not in view.table.by_id:
            return Truth.UNKNOWN, ()
        if self.matching:
            return self._weigh(view)
        found = view.decided.get(id(self))
        if found is None:
            found = view.decided[id(self)] = self._weigh(view)
        return found

    def _weigh(self, view: View) -> tuple[Truth, tuple[Support, ...]]:
        grounds = self.grounds(view)
        if len(grounds) == 1:
            said = self.test(grounds[0].item, view.subject)
            if said is None or said is Truth.UNKNOWN:
                return Truth.UNKNOWN, ()
            return said, (frozenset(grounds),)
        decided: list[tuple[Ground, Truth]] = []
        doubtful_here = False
        for ground in grounds:
            said = self.test(ground.item, view.subject)
            if said is Truth.UNKNOWN:
                doubtful_here = doubtful_here or ground.item.of_exam
            elif said is not None:
                decided.append((ground, said))
        latest = {id(ground) for ground in newest([ground for ground, _ in decided], self.slack)}
        yes = [g for g, said in decided if said is Truth.TRUE and id(g) in latest]
        no = [g for g, said in decided if said is Truth.FALSE and id(g) in latest]
        if yes and no and not all(g.item.of_exam for g in (*yes, *no)):
            self._note_disagreement(view, yes, no)
            return Truth.UNKNOWN, ()
        if yes:
            return Truth.TRUE, tuple(frozenset((g,)) for g in yes[:MAX_SUPPORTS])
        if not no or doubtful_here:
            return Truth.UNKNOWN, ()
        together = frozenset(g for g in no if g.item.of_exam)
        alone = tuple(frozenset((g,)) for g in no[:MAX_SUPPORTS] if not g.item.of_exam)
        return Truth.FALSE, ((together, *alone) if together else alone)

    def _note_disagreement(self, view: View, yes: list[Ground], no: list[Ground]) -> None:
        said = {g.item for g in (*yes[:MAX_SUPPORTS], *no[:MAX_SUPPORTS])}
        view.disagreements[self.fact] = view.disagreements.get(self.fact, frozenset()) | said

    def _missing_axis(self, view: View) -> str:
        for ground in self.grounds(view):
            if ground.item.state is State.PRESENT:
                for having in self.having:
                    if having.holds(ground.item) is Truth.UNKNOWN:
                        return f"{self.fact}#{having.axis}"
        return ""


def _shared(axis: str, item: Item, subject: Item | None) -> Truth:
    ours, theirs = item.values(axis), subject.values(axis) if subject else ()
    if not ours or not theirs:
        return Truth.UNKNOWN
    return Truth.FALSE if set(ours).isdisjoint(theirs) else Truth.TRUE


def _same_study(item: Item, subject: Item | None) -> Truth:
    """True for two entries of the examination, or two facts of one hour (one day without a clock time)."""
    if subject is None:
        return Truth.UNKNOWN
    if item.of_exam or subject.of_exam:
        return Truth.TRUE if item.of_exam and subject.of_exam else Truth.FALSE
    if item.age is None or subject.age is None:
        return Truth.UNKNOWN
    slack = 3600 if item.clock and subject.clock else 86_400
    return Truth.TRUE if abs(item.age - subject.age) <= slack else Truth.FALSE


@dataclass(frozen=True, slots=True, eq=False)
class OfSubject:
    """A further property of the very entry that is the rule's subject."""

    having: tuple[Having, ...]

    def judge(self, view: View) -> Truth:
        """True, false or unknown."""
        if view.subject is None:
            return Truth.UNKNOWN
        return all_of(having.holds(view.subject) for having in self.having)

    def supports(self, view: View, truth: Truth) -> tuple[Support, ...]:
        """Smallest sets of grounds that make it `truth`."""
        return (frozenset((Ground(view.subject),)),) if view.subject and self.judge(view) is truth else ()

    def unknowns(self, view: View) -> Iterator[str]:
        """The data that are unknown here."""
        if view.subject is not None:
            for having in self.having:
                if having.holds(view.subject) is Truth.UNKNOWN:
                    yield f"{view.subject.id}#{having.axis}"

    def atoms(self) -> Iterator[Condition]:
        """Every elementary condition in it."""
        yield self
