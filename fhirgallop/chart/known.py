"""Every id a chart may speak of: the catalogue's findings and the facts of terminology/chart.csv."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from decimal import Decimal
from functools import cache
from types import MappingProxyType

from fhirgallop.codes.coding import Coding
from fhirgallop.exam import catalogue, context


@dataclass(frozen=True, slots=True)
class Known:
    """What reading a chart needs to know of one id; `answers` are the values of a choice."""

    id: str
    kind: str
    unit: str
    low: Decimal | None
    high: Decimal | None
    answers: frozenset[str]
    axis: str
    qualifiers: frozenset[str]
    codings: tuple[Coding, ...]
    method: str


@cache
def known() -> Mapping[str, Known]:
    """All ids, the catalogue's first."""
    all_ = catalogue.load()
    found = {
        f.id: Known(
            f.id,
            f.kind,
            f.unit,
            f.low,
            f.high,
            frozenset(all_.answers(f)),
            f.answers,
            f.qualifiers,
            f.codings,
            f.method,
        )
        for f in all_.findings.values()
    }
    for d in context.definitions().values():
        found[d.id] = Known(d.id, d.kind, d.unit, d.low, d.high, d.answers, "", d.qualifiers, d.codings, "")
    return MappingProxyType(found)
