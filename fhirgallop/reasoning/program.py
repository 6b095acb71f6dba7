"""The rules of a rulebook compiled for a quick first look: which of them have anything to say at all.

Every distinct elementary condition is one bit. For an examination two bit sets are made, of what is true and
of what is false; groups of conditions are masks on them, and a rule is a few operations. Only rules with
something to say are then judged with their grounds. Rules are found by the finding they are about, so that
rules on findings nobody recorded cost nothing.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass
from typing import Final, NamedTuple

from fhirgallop.exam.context import State
from fhirgallop.reasoning.atoms import Atom
from fhirgallop.reasoning.conclusion import Outcome
from fhirgallop.reasoning.conditions import All, Any, Condition, Count, First, Not, View
from fhirgallop.reasoning.items import Ground, ItemTable
from fhirgallop.reasoning.logic import Truth
from fhirgallop.reasoning.rule import Rule
from fhirgallop.reasoning.vocabulary import Relation, Tier

# 1 true, -1 false, 0 unknown; the arguments are the sets of true and of false bits.
Test = Callable[[int, int], int]
_Outcomes = tuple[Outcome | None, Outcome | None, Outcome | None]

# Outcome when the other thing is unknown, true, false: indexed by 0, 1 and -1.
_OUTCOMES: Final[Mapping[Relation, _Outcomes]] = {
    Relation.REQUIRES: (Outcome.OPEN, Outcome.MET, Outcome.UNMET),
    Relation.CONTRADICTS: (Outcome.OPEN, Outcome.CONFLICT, None),
    Relation.CHECK: (Outcome.OPEN, Outcome.CONFLICT, None),
    Relation.EXPECTS: (Outcome.NOT_LOOKED_FOR, Outcome.CONFIRMED, Outcome.MISSING),
    Relation.SUGGESTS: (None, Outcome.EXPLAINS, None),
    Relation.FOLLOWS: (None, Outcome.EXPLAINS, None),
    Relation.GUARD: (None, Outcome.NOTE, None),
}
_URGENT: Final[_Outcomes] = (Outcome.OPEN, Outcome.EXPLAINS, None)
_TRUE: Final = Truth.TRUE
_FALSE: Final = Truth.FALSE
_PRESENT: Final = State.PRESENT
# What stays of an outcome while it is unknown whether the rule applies.
_WHILE_UNKNOWN: Final[Mapping[Outcome, Outcome]] = {
    Outcome.UNMET: Outcome.OPEN,
    Outcome.CONFLICT: Outcome.OPEN,
    Outcome.OPEN: Outcome.OPEN,
    Outcome.MISSING: Outcome.OPEN,
    Outcome.NOT_LOOKED_FOR: Outcome.NOT_LOOKED_FOR,
}


@dataclass(frozen=True, slots=True, eq=False)
class Step:
    """One rule compiled; `exact` is False when only its grounds can tell (it leans on its very subject)."""

    rule: Rule
    when: Test | None
    unless: Test | None
    other: Test | None
    outcomes: _Outcomes
    exact: bool


@dataclass(frozen=True, slots=True)
class Group:
    """The rules of one finding that share their subject, and the bits they look at."""

    subject: Atom
    plain: bool
    steps: tuple[Step, ...]
    needs: int


class Saying(NamedTuple):
    """A rule with something to say about one subject."""

    rule: Rule
    subject_truth: Truth
    subject: tuple[Ground, ...]
    outcome: Outcome


class Program:
    """The compiled rules of one index (the rules, or the guards)."""

    def __init__(self, rules: Iterable[Rule]) -> None:
        self._bits: dict[int, int] = {}
        self._atoms: list[tuple[Atom, bool]] = []
        self._of_fact: dict[str, int] = {}
        grouped: dict[str, dict[int, tuple[Atom, list[Step], int]]] = {}
        for rule in rules:
            step, needs = self._compile(rule)
            groups = grouped.setdefault(rule.finding, {})
            subject, steps, so_far = groups.get(id(rule.subject), (rule.subject, [], 0))
            steps.append(step)
            groups[id(rule.subject)] = (subject, steps, so_far | needs)
        self.groups: Mapping[str, tuple[Group, ...]] = {
            finding: tuple(Group(s, s.plain, tuple(steps), needs) for s, steps, needs in groups.values())
            for finding, groups in grouped.items()
        }

    def _compile(self, rule: Rule) -> tuple[Step, int]:
        needs: list[int] = [0]
        exact = [True]
        when, unless, other = (
            None if part is None else self._test(part, needs, exact)
            for part in (rule.when, rule.unless, rule.other)
        )
        outcomes = _URGENT if rule.tier is Tier.U else _OUTCOMES[rule.relation]
        return Step(rule, when, unless, other, outcomes, exact[0]), needs[0]

    def _test(self, condition: Condition, needs: list[int], exact: list[bool]) -> Test:
        if isinstance(condition, Atom) and not condition.matching:
            bit = self._bit(condition)
            needs[0] |= bit
            return lambda yes, no: 1 if yes & bit else -1 if no & bit else 0
        if isinstance(condition, Not):
            inner = self._test(condition.part, needs, exact)
            return lambda yes, no: -inner(yes, no)
        if isinstance(condition, Count):
            tests = tuple(self._test(part, needs, exact) for part in condition.parts)
            return _count_test(condition.least, tests)
        if isinstance(condition, All | Any | First):
            return self._group_test(condition, needs, exact)
        exact[0] = False
        return _unknown

    def _group_test(self, condition: All | Any | First, needs: list[int], exact: list[bool]) -> Test:
        parts = condition.parts
        if not isinstance(condition, First) and all(isinstance(p, Atom) and not p.matching for p in parts):
            mask = 0
            for part in parts:
                mask |= self._bit(part)  # type: ignore[arg-type]
            needs[0] |= mask
            if isinstance(condition, All):
                return lambda yes, no: 1 if yes & mask == mask else -1 if no & mask else 0
            return lambda yes, no: 1 if yes & mask else -1 if no & mask == mask else 0
        tests = tuple(self._test(part, needs, exact) for part in parts)
        if isinstance(condition, All):
            return lambda yes, no: min((test(yes, no) for test in tests), default=1)
        if isinstance(condition, Any):
            return lambda yes, no: max((test(yes, no) for test in tests), default=-1)
        return lambda yes, no: next((found for test in tests if (found := test(yes, no))), 0)

    def _bit(self, atom: Atom) -> int:
        found = self._bits.get(id(atom))
        if found is None:
            found = self._bits[id(atom)] = 1 << len(self._atoms)
            self._atoms.append((atom, atom.plain))
            self._of_fact[atom.fact] = self._of_fact.get(atom.fact, 0) | found
        return found

    def decide(self, view: View) -> list[Saying]:
        """Every rule with something to say, in a fixed order."""
        groups = self.groups
        recorded = sorted(view.table.by_id.keys() & groups.keys())
        needs = 0
        for finding in recorded:
            for group in groups[finding]:
                needs |= group.needs
        yes, no = self._known(needs, view.table, view)
        said: list[Saying] = []
        by_id = view.table.by_id
        for finding in recorded:
            items = by_id[finding]
            # By far the most frequent: one entry of today, of a rule that asks whether it is present.
            only_absent = len(items) == 1 and items[0].of_exam and items[0].state is not _PRESENT
            for group in groups[finding]:
                if only_absent and group.plain:
                    continue
                speaking = _speaking(group.steps, yes, no)
                if speaking:
                    for truth, grounds in subjects_of(group.subject, view):
                        _say(speaking, truth, grounds, said)
        return said

    def _known(self, needs: int, table: ItemTable, view: View) -> tuple[int, int]:
        recorded = 0
        of_fact, by_id = self._of_fact, table.by_id
        for fact in by_id:
            if fact in of_fact:
                recorded |= of_fact[fact]
        yes = no = 0
        left = needs & recorded
        while left:
            bit = left & -left
            left ^= bit
            atom, plain = self._atoms[bit.bit_length() - 1]
            items = by_id[atom.fact]
            if plain and len(items) == 1 and items[0].of_exam:
                if items[0].state is _PRESENT:
                    yes |= bit
                else:
                    no |= bit
                continue
            truth = atom.judge(view)
            if truth is _TRUE:
                yes |= bit
            elif truth is _FALSE:
                no |= bit
        return yes, no


def _count_test(least: int, tests: tuple[Test, ...]) -> Test:
    def test(yes: int, no: int) -> int:
        found = [each(yes, no) for each in tests]
        if found.count(1) >= least:
            return 1
        return -1 if len(found) - found.count(-1) < least else 0

    return test


def _speaking(steps: tuple[Step, ...], yes: int, no: int) -> list[tuple[Step, bool, Outcome]]:
    """The steps with something to say, whether they surely apply, and the outcome where they do."""
    found = []
    for step in steps:
        applies = True
        if step.when is not None:
            held = step.when(yes, no)
            if held < 0:
                continue
            applies = held > 0
        if step.unless is not None and step.unless(yes, no) > 0:
            continue
        if not step.exact:
            found.append((step, applies, Outcome.OPEN))
            continue
        outcome = step.outcomes[1 if step.other is None else step.other(yes, no)]
        if outcome is not None:
            found.append((step, applies, outcome))
    return found


def _unknown(_yes: int, _no: int) -> int:
    return 0


def _say(
    speaking: list[tuple[Step, bool, Outcome]], truth: Truth, grounds: tuple[Ground, ...], said: list[Saying]
) -> None:
    for step, applies, outcome in speaking:
        if (applies and truth is _TRUE) or not step.exact:
            said.append(Saying(step.rule, truth, grounds, outcome))
        elif outcome in _WHILE_UNKNOWN or step.rule.tier is Tier.U:
            said.append(Saying(step.rule, truth, grounds, _WHILE_UNKNOWN.get(outcome, Outcome.OPEN)))


def subjects_of(subject: Atom, view: View) -> list[tuple[Truth, tuple[Ground, ...]]]:
    """What a rule is about: each entry of the examination by itself, else what the chart says as one."""
    items = view.table.by_id[subject.fact]
    if len(items) == 1 and items[0].of_exam and subject.plain:
        return [(_TRUE, (Ground(items[0]),))] if items[0].state is _PRESENT else []
    found: list[tuple[Truth, tuple[Ground, ...]]] = []
    doubtful: Ground | None = None
    for ground in subject.grounds(view):
        if ground.item.of_exam:
            said = subject.test(ground.item)
            if said is Truth.TRUE:
                found.append((Truth.TRUE, (ground,)))
            elif said is Truth.UNKNOWN and doubtful is None and not subject.unnamed(ground.item):
                doubtful = ground
    if found:
        return found
    if subject.judge(view) is Truth.TRUE:
        alone = [ground for support in subject.supports(view, Truth.TRUE) for ground in support]
        return [(Truth.TRUE, tuple(alone))]
    return [(Truth.UNKNOWN, (doubtful,))] if doubtful is not None else []
