"""The one datum that would settle most open questions."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import Any, Final

from fhirgallop.reasoning.conclusion import Conclusion, Outcome
from fhirgallop.reasoning.conditions import View
from fhirgallop.reasoning.conflicts import recheck_of
from fhirgallop.reasoning.logic import Truth, all_of
from fhirgallop.reasoning.vocabulary import Recheck, Strength, Tier, kinds

_WEIGHTS: Final = {
    Strength.HARD: 8, Strength.STRONG: 8, Strength.MODERATE: 4, Strength.WEAK: 2, Strength.INFORMATIONAL: 1,
}  # fmt: skip
# Nobody is sent to look for what would end in the detail panel.
_WORTH_A_LINE: Final = frozenset({Tier.U, Tier.T1, Tier.T2})


@dataclass(frozen=True, slots=True)
class Datum:
    """Something worth finding out.

    Attributes:
        id: what to find out: an id, or `id#property`.
        settles: rules whose open question it alone could settle, by id.
        action, cost: how, from the cost table.
    """

    id: str
    settles: tuple[str, ...]
    action: str
    cost: int

    def as_dict(self) -> dict[str, Any]:
        """JSON values."""
        fact, _, axis = self.id.partition("#")
        return {
            "id": self.id,
            "label": kinds()[fact].label,
            "property": axis,
            "settles": list(self.settles),
            "action": self.action,
            "cost": self.cost,
        }


def next_datum(conclusions: Iterable[Conclusion], view: View, table: Sequence[Recheck]) -> Datum | None:
    """The datum with the weightiest questions settled, then the cheapest, then the first by name."""
    settled: dict[str, dict[str, int]] = {}
    for conclusion in conclusions:
        if conclusion.outcome is not Outcome.OPEN or conclusion.silenced_by:
            continue
        weight = _WEIGHTS.get(conclusion.strength, 0)
        if weight and conclusion.rule.tier in _WORTH_A_LINE:
            for datum in conclusion.unknown:
                if _could_settle(datum, conclusion, view):
                    settled.setdefault(datum, {})[conclusion.rule.id] = weight
    found = [
        Datum(datum, tuple(sorted(rules)), row.action, row.cost)
        for datum, rules in settled.items()
        if (row := recheck_of(datum, "", table))
    ]
    return min(found, key=lambda d: (-sum(settled[d.id].values()), d.cost, d.id), default=None)


def _could_settle(datum: str, conclusion: Conclusion, view: View) -> bool:
    """True when the answer alone, whichever it is, could leave nothing unknown in the rule.

    A rule of which it is not even known whether it applies asks nothing: no chart says "no prosthesis".
    """
    rule = conclusion.rule
    subject = conclusion.subject[0].item if conclusion.subject else None
    if rule.when is not None and rule.when.judge(view.about(subject)) is not Truth.TRUE:
        return False
    if len(conclusion.unknown) == 1:
        return True
    if "#" in datum:
        return False
    for truth in (Truth.TRUE, Truth.FALSE):
        trial = view.about(subject).assuming({datum: truth})
        judged = all_of(c.judge(trial) for c in (rule.when, rule.other) if c is not None)
        if judged is not Truth.UNKNOWN:
            return True
    return False
