"""Natriuretic peptide ranges and the H2FPEF score. NT-proBNP in pg/mL, age in years.

Sources: ICON-RELOADED 2018 (seen), ESC heart failure guideline 2021 (from memory), Reddy 2018 (points seen).
"""

from __future__ import annotations

from decimal import Decimal

from fhirgallop.haemodynamics.classification import Panel, Verdict, classification
from fhirgallop.haemodynamics.values import UNKNOWN, Criterion, Given

_ITEMS = ("heavy", "hypertensive", "atrial-fibrillation", "pulmonary", "elder", "filling")


@classification("peptide.nt-probnp-acute")
def nt_probnp_acute(panel: Panel) -> Verdict:
    """Rule-out below 300 at any age, rule-in by age band, grey between; an unknown age leaves bands open."""
    out = panel.judge("nt-probnp.out")
    bands = {band: panel.judge(f"nt-probnp.in.{band}") for band in ("young", "middle", "old")}
    young, old = panel.judge("nt-probnp.age.young"), panel.judge("nt-probnp.age.old")
    if out.state == UNKNOWN:
        return panel.verdict(UNKNOWN)
    if out.met:
        return panel.verdict("rule-out range")
    if young.state == UNKNOWN:
        relevant = list(bands.values())
    else:
        relevant = [bands["young" if young.met else "old" if old.met else "middle"]]
    found = {"rule-in range" if criterion.met else "grey range" for criterion in relevant}
    if len(found) == 1:
        return panel.verdict(found.pop())
    return panel.verdict(UNKNOWN, possible=found, notes=("The limit depends on age.",))


@classification("peptide.nt-probnp-chronic")
def nt_probnp_chronic(panel: Panel) -> Verdict:
    """Below or not below the outpatient rule-out limit; not below it rules nothing in."""
    low = panel.judge("nt-probnp.chronic")
    if low.state == UNKNOWN:
        return panel.verdict(UNKNOWN)
    return panel.verdict("below the rule-out limit" if low.met else "not below the rule-out limit")


@classification("score.h2fpef")
def h2fpef(panel: Panel) -> Verdict:
    """Points 0 to 9 as a range from what is known to what is possible, and the class of both ends."""
    items = [panel.judge(f"h2fpef.{name}") for name in _ITEMS]
    least = _points(panel, [item for item in items if item.met])
    most = least + _points(panel, [item for item in items if item.state == UNKNOWN])
    derived = (Given("points_least", least, "{score}"), Given("points_most", most, "{score}"))
    possible = {_score_class(panel, Decimal(points)) for points in range(int(least), int(most) + 1)}
    if len(possible) == 1:
        return panel.verdict(possible.pop(), derived=derived)
    return panel.verdict(UNKNOWN, possible=possible, derived=derived)


def _points(panel: Panel, items: list[Criterion]) -> Decimal:
    return Decimal(sum(panel.cutoffs.find(item.id, panel.scheme.edition).points for item in items))


def _score_class(panel: Panel, points: Decimal) -> str:
    if points <= panel.limit("h2fpef.low"):
        return "low"
    return "high" if points >= panel.limit("h2fpef.high") else "intermediate"
