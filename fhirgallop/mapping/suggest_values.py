"""What the values of a local field may mean, and how well they fit what the field may be."""

from __future__ import annotations

import re
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass
from decimal import Decimal, InvalidOperation
from functools import cache
from typing import Final, TypeVar

from rapidfuzz import fuzz

from fhirgallop.exam import catalogue
from fhirgallop.exam.catalogue import AxisValue, FindingDefinition

_ALIKE: Final = 84.0
T = TypeVar("T")


@dataclass(frozen=True, slots=True)
class Target:
    """What a field can be mapped to: a finding, an axis of it (`axis` set), or a part of the record."""

    finding: str
    axis: str = ""

    def __str__(self) -> str:
        return f"{self.finding}#{self.axis}" if self.axis else self.finding


def suggest_values(target: Target, values: Iterable[str]) -> dict[str, str]:
    """For each wording of a field: the presence or the axis value it may mean; what has none is left out."""
    known = catalogue.load()
    definition = known.findings.get(target.finding)
    axis = target.axis or (definition.answers if definition else "")
    axes = (axis,) if axis in known.axes else ()
    found: dict[str, str] = {}
    for value in dict.fromkeys(values):
        for name in (*axes, "presence"):
            best = max(
                (
                    (_sameness(value, wording), id_)
                    for id_, wordings in _values_of(name).items()
                    for wording in wordings
                ),
                default=(0.0, ""),
            )
            if best[0] >= _ALIKE:
                found[value] = best[1]
                break
    return found


def values_fit(definition: FindingDefinition, axis: str, seen: Sequence[str]) -> tuple[float, str]:
    """Whether what was seen is the kind of thing a target holds."""
    numbers = [number for value in seen if (number := _number(value)) is not None]
    numeric = len(numbers) > 0.7 * len(seen)
    if axis == "grade":
        return (1.5, "the values look like grades") if _share(seen, _grade_like) > 0.6 else (0.8, "")
    wanted = axis or definition.answers
    if wanted:
        share = len(suggest_values(Target(definition.id, axis), seen)) / len(seen)
        own = _share(seen, lambda value: _names_value(value, wanted))
        if own > 0.3:
            return 1.1 + 0.3 * own, "its answers are known"
        return (0.75 if numeric else 0.9 if share else 0.85), ""
    if definition.kind == "quantity":
        if not numeric:
            return 0.55, ""
        low, high = definition.low, definition.high
        inside = _share(numbers, lambda n: (low is None or n >= low) and (high is None or n <= high))
        return (1.15, "the numbers are plausible") if inside > 0.8 else (0.7, "")
    if definition.kind == "sign":
        told = _share(seen, lambda value: _names_value(value, "presence"))
        return (1.12, "the values say present or absent") if told > 0.6 else (0.75 if numeric else 0.95, "")
    return 1.0, ""


def _share(values: Sequence[T], test: Callable[[T], bool]) -> float:
    return sum(map(test, values)) / len(values)


def _grade_like(value: str) -> bool:
    return bool(re.fullmatch(r"(?i)\s*(grade\s*)?([1-6]|i{1,3}|iv|vi?)(\s*/\s*([46]|iv|vi))?\s*", value))


def _names_value(value: str, axis: str) -> bool:
    return any(_sameness(value, w) >= _ALIKE for ws in _values_of(axis).values() for w in ws)


@cache
def _values_of(axis: str) -> Mapping[str, tuple[str, ...]]:
    """Axis value -> its wordings; the presences for `presence`."""
    known = catalogue.load()
    found: dict[str, list[str]] = {}
    values: Iterable[AxisValue] = known.axes[axis].values.values() if axis in known.axes else ()
    for value in values:
        found[value.id] = [value.label, value.id.replace("-", " "), *re.findall(r"[^()]+", value.label)]
    for synonym in known.synonyms:
        owner, _, id_ = synonym.id.partition(":")
        if owner == axis and id_ in found:
            found[id_].append(synonym.wording)
    return {id_: tuple(dict.fromkeys(w.strip() for w in words if w.strip())) for id_, words in found.items()}


def _sameness(value: str, wording: str) -> float:
    one, other = value.strip().casefold(), wording.casefold()
    if one == other:
        return 100.0
    if min(len(one), len(other)) < 4:
        return 0.0
    return fuzz.ratio(one, other)


def _number(value: str) -> Decimal | None:
    try:
        number = Decimal(value.strip().replace(",", ".").removesuffix("%").strip())
    except InvalidOperation:
        return None
    return number if number.is_finite() else None
