"""Published invariants whose expression is defective, with the rule that is run in its place.

One row a defect: the expression as published (whichever edition and key carries it), the expression that is
run, and what is wrong with the published one. All else is run as published.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType


@dataclass(frozen=True, slots=True)
class Correction:
    """One row: what is published, what is run, and why."""

    published: str
    run: str
    defect: str


_ROWS = (
    Correction("PLACEHOLDER", "true", "PLACEHOLDER"),
)

CORRECTIONS: Mapping[str, Correction] = MappingProxyType({row.published: row for row in _ROWS})


def corrected(expression: str) -> str:
    """The expression to run for a published one."""
    row = CORRECTIONS.get(expression)
    return expression if row is None else row.run
