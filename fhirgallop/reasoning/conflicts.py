"""Minimal conflict sets, and the cheapest set of data to look at again that touches all of them.

A conflict set is a smallest set of entries that cannot all hold. What to re-check is a minimum-cost hitting
set; ties go to the datum in most sets, then the oldest, then the least reliable, then by name.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Final

from fhirgallop.reasoning.conclusion import Conclusion, item_dict
from fhirgallop.reasoning.items import Item
from fhirgallop.reasoning.vocabulary import Recheck

# Beyond this many steps of the search the best set found so far is taken, and said to be such.
MAX_STEPS: Final = 20_000
_PLAIN: Final = Recheck("", "", 1, "read the entry again", 5)
_TieKey = tuple[int, float, int, str]


@dataclass(frozen=True, slots=True)
class ConflictSet:
    """Entries that cannot all hold, and the rules that say so."""

    items: tuple[Item, ...]
    rules: tuple[str, ...]

    def as_dict(self) -> dict[str, Any]:
        """JSON values."""
        return {"items": [item_dict(item) for item in self.items], "rules": list(self.rules)}


@dataclass(frozen=True, slots=True)
class Look:
    """One datum to look at again, how, and at what cost."""

    item: Item
    action: str
    cost: int
    settles: int

    def as_dict(self) -> dict[str, Any]:
        """JSON values."""
        return {
            "item": item_dict(self.item),
            "action": self.action,
            "cost": self.cost,
            "settles": self.settles,
        }


@dataclass(frozen=True, slots=True)
class Repair:
    """The data to look at again; `exact` is False when the search was cut short."""

    looks: tuple[Look, ...] = ()
    cost: int = 0
    exact: bool = True

    def as_dict(self) -> dict[str, Any]:
        """JSON values."""
        return {"cost": self.cost, "exact": self.exact, "looks": [look.as_dict() for look in self.looks]}


def conflict_sets(conclusions: Iterable[Conclusion], items: Mapping[str, Item]) -> tuple[ConflictSet, ...]:
    """The minimal sets of all hard and strong conflicts, in a fixed order."""
    saying: dict[frozenset[str], set[str]] = {}
    for conclusion in conclusions:
        if conclusion.conflicts:
            for keys in conclusion.sets:
                saying.setdefault(keys, set()).add(conclusion.rule.id)
    kept = minimal(saying)
    return tuple(
        ConflictSet(tuple(items[key] for key in sorted(keys)), tuple(sorted(saying[keys]))) for keys in kept
    )


def minimal(sets: Iterable[frozenset[str]]) -> list[frozenset[str]]:
    """Without any set that contains another, smallest first."""
    kept: list[frozenset[str]] = []
    for keys in sorted(set(sets), key=lambda s: (len(s), sorted(s))):
        if keys and not any(other <= keys for other in kept):
            kept.append(keys)
    return kept


def recheck_of(item_id: str, source: str, table: Sequence[Recheck]) -> Recheck:
    """The first row of the cost table that fits an id and, unless empty, a source."""
    for row in table:
        if (not row.source or row.source == source) and item_id.startswith(row.prefix):
            return row
    return _PLAIN


def repair(sets: Sequence[ConflictSet], table: Sequence[Recheck]) -> Repair:
    """The cheapest data to look at again so that every conflict set is touched."""
    items = {item.key: item for conflict in sets for item in conflict.items}
    rows = {key: recheck_of(item.id, item.source.value, table) for key, item in items.items()}
    groups = [frozenset(item.key for item in conflict.items) for conflict in sets]
    counts = {key: sum(key in group for group in groups) for key in items}
    ties: dict[str, _TieKey] = {
        key: (-counts[key], _youth(item), rows[key].reliability, key) for key, item in items.items()
    }
    search = HittingSet(groups, {key: row.cost for key, row in rows.items()}, ties)
    chosen = search.best()
    looks = tuple(Look(items[key], rows[key].action, rows[key].cost, counts[key]) for key in chosen)
    return Repair(looks, sum(look.cost for look in looks), search.exact)


def _youth(item: Item) -> float:
    return float("-inf") if item.age is None else -float(item.age)


class HittingSet:
    """Minimum-cost hitting set by branch and bound over the smallest set not yet touched."""

    def __init__(
        self, groups: Sequence[frozenset[str]], cost: Mapping[str, int], ties: Mapping[str, _TieKey]
    ) -> None:
        self.exact = True
        self._groups = sorted(groups, key=lambda g: (len(g), sorted(g)))
        self._cost = cost
        self._ties = ties
        self._best: tuple[int, list[_TieKey]] | None = None
        self._chosen: tuple[str, ...] = ()
        self._steps = 0

    def best(self) -> tuple[str, ...]:
        """The chosen keys, best first; empty when there is nothing to touch."""
        self._visit((), 0, frozenset())
        return tuple(sorted(self._chosen, key=lambda key: self._ties[key]))

    def _visit(self, chosen: tuple[str, ...], cost: int, barred: frozenset[str]) -> None:
        self._steps += 1
        if self._best is not None and (cost > self._best[0] or self._steps > MAX_STEPS):
            self.exact = self.exact and self._steps <= MAX_STEPS
            return
        open_group = next((g for g in self._groups if g.isdisjoint(chosen)), None)
        if open_group is None:
            rank = (cost, sorted(self._ties[key] for key in chosen))
            if self._best is None or rank < self._best:
                self._best, self._chosen = rank, chosen
            return
        tried = barred
        for key in sorted(open_group - barred, key=lambda k: (self._cost[k], self._ties[k])):
            self._visit((*chosen, key), cost + self._cost[key], tried)
            tried |= {key}
