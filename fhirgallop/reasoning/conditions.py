"""Conditions: what a rule asks of the items, answered true, false or unknown, with the items that support it.

A support is a smallest set of grounds that alone makes the answer what it is. The elementary questions live
in `atoms`; here they are combined.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass, field
from itertools import combinations, islice, product
from typing import Final, Protocol

from fhirgallop.reasoning.items import Ground, Item, ItemTable
from fhirgallop.reasoning.logic import Truth, all_of, any_of

Support = frozenset[Ground]
MAX_SUPPORTS: Final = 24
NOTHING: Final[Support] = frozenset()


@dataclass(slots=True)
class View:
    """What a condition is judged on: the items, the entry that is the subject, and assumptions to try out."""

    table: ItemTable
    subject: Item | None = None
    assumed: Mapping[str, Truth] = field(default_factory=dict)
    decided: dict[int, tuple[Truth, tuple[Support, ...]]] = field(default_factory=dict)
    disagreements: dict[str, frozenset[Item]] = field(default_factory=dict)

    def about(self, subject: Item | None) -> View:
        """The same view for another subject."""
        return View(self.table, subject, self.assumed, self.decided, self.disagreements)

    def assuming(self, assumed: Mapping[str, Truth]) -> View:
        """The same view with unknown data assumed."""
        return View(self.table, self.subject, assumed, self.decided, self.disagreements)


class Condition(Protocol):
    """Anything that can be judged."""

    def judge(self, view: View) -> Truth:
        """True, false or unknown."""

    def supports(self, view: View, truth: Truth) -> tuple[Support, ...]:
        """Smallest sets of grounds that make it `truth`, which is what `judge` gave."""

    def unknowns(self, view: View) -> Iterator[str]:
        """The data that are unknown here: ids, or `id#axis` where only a property is unknown."""

    def atoms(self) -> Iterator[Condition]:
        """Every elementary condition in it."""


class _Compound:
    """What every condition made of parts has in common."""

    __slots__ = ()
    parts: tuple[Condition, ...]

    def unknowns(self, view: View) -> Iterator[str]:
        """The data that are unknown here."""
        for part in self.parts:
            yield from part.unknowns(view)

    def atoms(self) -> Iterator[Condition]:
        """Every elementary condition in it."""
        for part in self.parts:
            yield from part.atoms()


@dataclass(frozen=True, slots=True, eq=False)
class All(_Compound):
    """True when every part is."""

    parts: tuple[Condition, ...]

    def judge(self, view: View) -> Truth:
        """True, false or unknown."""
        return all_of(part.judge(view) for part in self.parts)

    def supports(self, view: View, truth: Truth) -> tuple[Support, ...]:
        """Smallest sets of grounds that make it `truth`."""
        return _combine(self.parts, view, truth, together=Truth.TRUE)


@dataclass(frozen=True, slots=True, eq=False)
class Any(_Compound):
    """True when one part is."""

    parts: tuple[Condition, ...]

    def judge(self, view: View) -> Truth:
        """True, false or unknown."""
        return any_of(part.judge(view) for part in self.parts)

    def supports(self, view: View, truth: Truth) -> tuple[Support, ...]:
        """Smallest sets of grounds that make it `truth`."""
        return _combine(self.parts, view, truth, together=Truth.FALSE)


@dataclass(frozen=True, slots=True, eq=False)
class First(_Compound):
    """As the first part that is known: the better measurement before the proxy."""

    parts: tuple[Condition, ...]

    def judge(self, view: View) -> Truth:
        """True, false or unknown."""
        known = (part.judge(view) for part in self.parts)
        return next((truth for truth in known if truth is not Truth.UNKNOWN), Truth.UNKNOWN)

    def supports(self, view: View, truth: Truth) -> tuple[Support, ...]:
        """Smallest sets of grounds that make it `truth`."""
        for part in self.parts:
            if part.judge(view) is not Truth.UNKNOWN:
                return part.supports(view, truth)
        return ()

    def unknowns(self, view: View) -> Iterator[str]:
        """The data that are unknown here."""
        if self.judge(view) is Truth.UNKNOWN:
            yield from _Compound.unknowns(self, view)


@dataclass(frozen=True, slots=True, eq=False)
class Count(_Compound):
    """True when at least `least` of the parts are."""

    least: int
    parts: tuple[Condition, ...]

    def judge(self, view: View) -> Truth:
        """True, false or unknown."""
        judged = [part.judge(view) for part in self.parts]
        certain = judged.count(Truth.TRUE)
        if certain >= self.least:
            return Truth.TRUE
        return Truth.FALSE if certain + judged.count(Truth.UNKNOWN) < self.least else Truth.UNKNOWN

    def supports(self, view: View, truth: Truth) -> tuple[Support, ...]:
        """Smallest sets of grounds that make it `truth`."""
        each = [part.supports(view, truth) for part in self.parts if part.judge(view) is truth]
        size = self.least if truth is Truth.TRUE else len(self.parts) - self.least + 1
        chosen = islice(combinations(each, size), MAX_SUPPORTS)
        return smallest(support for group in chosen for support in joined(group))


@dataclass(frozen=True, slots=True, eq=False)
class Not:
    """The opposite; of unknown, unknown."""

    part: Condition

    def judge(self, view: View) -> Truth:
        """True, false or unknown."""
        return ~self.part.judge(view)

    def supports(self, view: View, truth: Truth) -> tuple[Support, ...]:
        """Smallest sets of grounds that make it `truth`."""
        return self.part.supports(view, ~truth)

    def unknowns(self, view: View) -> Iterator[str]:
        """The data that are unknown here."""
        return self.part.unknowns(view)

    def atoms(self) -> Iterator[Condition]:
        """Every elementary condition in it."""
        return self.part.atoms()


def _combine(
    parts: tuple[Condition, ...], view: View, truth: Truth, *, together: Truth
) -> tuple[Support, ...]:
    """Supports of a group: all parts are needed for `together`, any one part for its opposite."""
    each = [part.supports(view, truth) for part in parts if part.judge(view) is truth]
    if truth is together:
        return joined(each)
    return smallest(support for supports in each for support in supports)


def joined(each: Iterable[tuple[Support, ...]]) -> tuple[Support, ...]:
    """One support of every part, put together in all ways, at most `MAX_SUPPORTS` of them."""
    found: tuple[Support, ...] = (NOTHING,)
    for supports in each:
        found = smallest(a | b for a, b in product(found, supports or (NOTHING,)))
    return found


def smallest(supports: Iterable[Support]) -> tuple[Support, ...]:
    """Without those that hold another; least weakened first, in a fixed order, at most `MAX_SUPPORTS`."""
    found: list[Support] = []
    for support in sorted(set(supports), key=_rank):
        if not any(other <= support for other in found):
            found.append(support)
    return tuple(sorted(found, key=lambda s: (steps(s), _rank(s)))[:MAX_SUPPORTS])


def _rank(support: Support) -> tuple[int, list[str]]:
    return len(support), sorted(ground.item.key for ground in support)


def steps(support: Support) -> int:
    """Steps of strength lost: one for anything stale, one for anything of low trust."""
    stale = any(g.stale for g in support)
    doubtful = any(g.imprecise or g.item.low_trust for g in support)
    return int(stale) + int(doubtful)
