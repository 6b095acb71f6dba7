"""The words of the rules: kinds of finding and fact, relations, strengths, tiers, windows and cut-offs."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from decimal import Decimal
from enum import StrEnum
from functools import cache
from types import MappingProxyType
from typing import Final

from fhirgallop.exam import catalogue, context


class Relation(StrEnum):
    """What a rule says of its finding and the other thing."""

    REQUIRES = "requires"
    CONTRADICTS = "contradicts"
    CHECK = "check"
    EXPECTS = "expects"
    SUGGESTS = "suggests"
    FOLLOWS = "follows"
    GUARD = "guard"


class Strength(StrEnum):
    """How much a rule can bear, strongest first."""

    HARD = "hard"
    STRONG = "strong"
    MODERATE = "moderate"
    WEAK = "weak"
    INFORMATIONAL = "informational"
    NONE = "none"

    def weakened(self, steps: int) -> Strength:
        """`steps` steps further down."""
        order = tuple(Strength)
        return order[min(order.index(self) + steps, len(order) - 1)]


class Tier(StrEnum):
    """How a conclusion may be shown, loudest first."""

    U = "U"
    """The fixed phrase only."""
    T1 = "T1"
    """Asked once, at entry; may interrupt."""
    T2 = "T2"
    """Advisory, in the margin."""
    T3 = "T3"
    """Detail panel only."""
    T0 = "T0"
    """Never shown by itself."""

    def at_most(self, other: Tier) -> Tier:
        """The quieter of the two."""
        return max(self, other, key=tuple(Tier).index)


CEILING: Final[Mapping[Strength, Tier]] = MappingProxyType(
    {
        Strength.HARD: Tier.T1,
        Strength.STRONG: Tier.T1,
        Strength.MODERATE: Tier.T2,
        Strength.WEAK: Tier.T3,
        Strength.INFORMATIONAL: Tier.T3,
        Strength.NONE: Tier.T0,
    }
)
"""The loudest tier a strength can bear once it has been weakened."""

URGENT_PHRASE: Final = "urgent clinical review"


@dataclass(frozen=True, slots=True)
class Cutoff:
    """A published threshold; `source` belongs to the value in force, `alternatives` are the other ones."""

    name: str
    value: Decimal
    unit: str
    source: str
    seen: str
    alternatives: tuple[tuple[Decimal, str], ...] = ()


@dataclass(frozen=True, slots=True)
class Window:
    """How long a datum counts as of today.

    Attributes:
        name: its name in the rules.
        within: seconds before the examination; None does not go stale.
        drops: outside the window the datum is as if not recorded; else it is weakened.
        same_encounter: a datum of another encounter is outside.
        by_severity: other lengths for a datum with that severity.
    """

    name: str
    within: int | None
    drops: bool = False
    same_encounter: bool = False
    by_severity: tuple[tuple[str, int], ...] = ()


@dataclass(frozen=True, slots=True)
class Family:
    """Rules that share one card, and the question it asks."""

    id: str
    title: str
    question: str


@dataclass(frozen=True, slots=True)
class Recheck:
    """What it costs to look at a datum again: published cost table, in arbitrary units.

    `source` or `prefix` of the id selects it; the lower `reliability`, the sooner it is doubted.
    """

    source: str
    prefix: str
    cost: int
    action: str
    reliability: int


@dataclass(frozen=True, slots=True)
class Kind:
    """What the rules need to know of one finding or fact id."""

    id: str
    label: str
    kind: str
    unit: str
    low: Decimal | None
    high: Decimal | None
    answers: frozenset[str]
    qualifiers: frozenset[str]
    parent: str


@cache
def kinds() -> Mapping[str, Kind]:
    """Every id a rule may name: the catalogue's findings and the chart's facts."""
    known = catalogue.load()
    found = {
        f.id: Kind(
            f.id, f.label, f.kind, f.unit, f.low, f.high, frozenset(known.answers(f)), f.qualifiers, f.parent
        )
        for f in known.findings.values()
    }
    for d in context.definitions().values():
        found[d.id] = Kind(d.id, d.label, d.kind, d.unit, d.low, d.high, d.answers, d.qualifiers, d.parent)
    return MappingProxyType(found)


@cache
def ancestors() -> Mapping[str, tuple[str, ...]]:
    """Id -> the ids it counts as too: its dotted parents of the same kind."""
    known = kinds()
    found: dict[str, tuple[str, ...]] = {}
    for kind in known.values():
        line: list[str] = []
        above = known.get(kind.parent)
        while above is not None:
            if above.kind == kind.kind:
                line.append(above.id)
            above = known.get(above.parent)
        if line:
            found[kind.id] = tuple(line)
    return MappingProxyType(found)
