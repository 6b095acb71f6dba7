"""Numbers of a line in the unit of their finding, and whether they can be true."""

from __future__ import annotations

from typing import Final

from fhirgallop.codes import units
from fhirgallop.exam.catalogue import FindingDefinition
from fhirgallop.exam.entry import Measure
from fhirgallop.phrases.items import Item

# Dimensions with one customary unit, which a line may leave out.
_CUSTOMARY: Final = frozenset({"mm[Hg]", "/min", "%", "{ratio}", "{score}", "1"})


def measure(item: Item, finding: FindingDefinition) -> Measure | None:
    """The number in the finding's unit; None where the unit is another's, or is missing and not customary."""
    target = units.table().by_code[finding.unit]
    if item.number is None:
        return None
    if item.unit is None:
        if finding.unit not in _CUSTOMARY:
            return None
        return Measure(item.number, finding.unit, item.sign, item.high)
    if item.unit.dimension != target.dimension:
        return None
    high = units.convert(item.high, item.unit, target) if item.high is not None else None
    original = f"{item.number} {item.unit.printed}" if item.unit != target else ""
    return Measure(units.convert(item.number, item.unit, target), finding.unit, item.sign, high, original)


def plausible(measure: Measure, finding: FindingDefinition) -> bool:
    """Whether a number lies within what the catalogue calls plausible."""
    top = measure.high if measure.high is not None else measure.value
    return (finding.low is None or measure.value >= finding.low) and (
        finding.high is None or top <= finding.high
    )
