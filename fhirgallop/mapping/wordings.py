"""Wordings of a field's values, and looking them up in a map's lists."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from typing import Generic, TypeVar

from fhirgallop.intake.record import Amount, Coded, Field, Span, Value

T = TypeVar("T")


def wordings(value: Value) -> tuple[str, ...]:
    """The texts a value may be known by, the surest first."""
    match value:
        case str():
            return (value,)
        case bool():
            return ("true",) if value else ("false",)
        case Coded(code, display):
            return tuple(text for text in (code, display) if text)
        case Amount(number, unit, comparator):
            plain = f"{comparator}{number}"
            return (plain, f"{plain} {unit}") if unit else (plain,)
        case Span(low, high, unit):
            ends = f"{'' if low is None else low}-{'' if high is None else high}"
            return (f"{ends} {unit}".strip(),)
    return (str(value),)


def words_of(value: Value) -> str:
    """The value in words, for a text or a remark: a coded value by its display."""
    return value.display or value.code if isinstance(value, Coded) else wordings(value)[-1]


class Lookup(Generic[T]):
    """Wording -> meaning: the exact wording first, then trimmed and without regard to case where unique."""

    __slots__ = ("_folded", "exact")

    def __init__(self, meanings: Mapping[str, T]) -> None:
        self.exact = dict(meanings)
        folded: dict[str, list[str]] = {}
        for wording in meanings:
            folded.setdefault(_fold(wording), []).append(wording)
        self._folded = {
            short: meanings[found[0]]
            for short, found in folded.items()
            if len(found) == 1 or all(meanings[wording] == meanings[found[0]] for wording in found)
        }

    def find(self, value: Value) -> T | None:
        """What the value means, or None when no wording of the list is like it."""
        texts = (value,) if type(value) is str else wordings(value)
        for text in texts:
            if (found := self.exact.get(text)) is not None:
                return found
        for text in texts:
            if (found := self._folded.get(text.strip().casefold())) is not None:
                return found
        return None


class Blanks:
    """Which values count as an empty box."""

    __slots__ = ("_folded",)

    def __init__(self, blanks: Iterable[str]) -> None:
        self._folded = frozenset({"", *(_fold(wording) for wording in blanks)})

    def filled(self, field: Field | None) -> tuple[Value, ...]:
        """The values of a field that say something."""
        if field is None:
            return ()
        values = field.values
        if len(values) == 1:
            value = values[0]
            # Nearly every box holds one text; the general question is asked of the others only.
            if type(value) is str:
                return () if value.strip().casefold() in self._folded else values
            return () if self.is_blank(value) else values
        return tuple(value for value in values if not self.is_blank(value))

    def is_blank(self, value: Value) -> bool:
        """True for no text at all, for white space, and for the map's own wordings of nothing."""
        if isinstance(value, Coded):
            return _fold(value.code) in self._folded and _fold(value.display) in self._folded
        return isinstance(value, str) and _fold(value) in self._folded


def _fold(text: str) -> str:
    return text.strip().casefold()
