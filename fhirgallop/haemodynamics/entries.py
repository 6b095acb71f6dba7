"""The door of every computation and classification: what was given, checked against the input table.

A missing, impossible or excluded entry is a `Reason`, all of them at once; a name that does not exist, or a
text where a number belongs, is the programmer's mistake and raises TypeError.
"""

from __future__ import annotations

import operator
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass
from decimal import Decimal

from fhirgallop.haemodynamics.tables import Comparator, Condition, Input, load
from fhirgallop.haemodynamics.values import Entry, Given, Reason, as_decimal

_COMPARE: Mapping[Comparator, Callable[[Decimal, Decimal], bool]] = {
    "<": operator.lt,
    "<=": operator.le,
    ">": operator.gt,
    ">=": operator.ge,
    "is": operator.eq,
}


@dataclass(frozen=True, slots=True)
class Entries:
    """The entries that are known, by name, in the order of the owner's table row."""

    values: Mapping[str, Decimal | bool | str]

    def number(self, name: str) -> Decimal | None:
        """The number of that name, or None when it was not given."""
        value = self.values.get(name)
        return value if isinstance(value, Decimal) else None

    def flag(self, name: str) -> bool | None:
        """The yes or no of that name, or None when it was not given."""
        value = self.values.get(name)
        return value if isinstance(value, bool) else None

    def choice(self, name: str) -> str:
        """The choice of that name, or an empty text when it was not given."""
        value = self.values.get(name)
        return value if isinstance(value, str) else ""

    def given(self) -> tuple[Given, ...]:
        """The entries with their units, for the result to name."""
        inputs = load().inputs
        return tuple(Given(name, value, inputs[name].unit) for name, value in self.values.items())


def on_side(value: Decimal | bool, comparator: Comparator, limit: Decimal | bool) -> bool:
    """Whether a value is on the named side of a limit; flags know `is` only."""
    if isinstance(value, bool) or isinstance(limit, bool):
        return value is limit
    return _COMPARE[comparator](value, limit)


def admit(
    owner: str, accepted: tuple[str, ...], needed: tuple[str, ...], given: Mapping[str, Entry]
) -> tuple[Entries, list[Reason]]:
    """Check what was given against the input table.

    Args:
        owner: id of the computation or classification, for messages.
        accepted: every input name it knows.
        needed: the names without which it cannot work.
        given: what the caller handed over; None is unknown.

    Raises:
        TypeError: for a name the owner does not know, or a value of the wrong kind.
    """
    if strangers := set(given) - set(accepted):
        raise TypeError(
            f"{owner} knows no input {', '.join(sorted(strangers))}; it takes {', '.join(accepted)}"
        )
    inputs = load().inputs
    values: dict[str, Decimal | bool | str] = {}
    reasons: list[Reason] = []
    for name in accepted:
        entry, spec = given.get(name), inputs[name]
        if entry is None:
            if name in needed:
                text = f"{spec.label} is needed and was not given."
                reasons.append(Reason("missing", name, "needed", text))
            continue
        checked = _checked(spec, entry)
        if isinstance(checked, Reason):
            reasons.append(checked)
        else:
            values[name] = checked
    return Entries(values), reasons


def _checked(spec: Input, entry: Entry) -> Decimal | bool | str | Reason:
    if spec.kind == "flag":
        if not isinstance(entry, bool):
            raise TypeError(f"{spec.name} is true, false or None")
        return entry
    if spec.kind == "choice":
        if not isinstance(entry, str):
            raise TypeError(f"{spec.name} is a text: {spec.limit}")
        if entry in spec.choices:
            return entry
        return Reason("not-a-choice", spec.name, spec.limit, f"{spec.label} must be {spec.limit}.")
    if isinstance(entry, str) or entry is None:
        raise TypeError(f"{spec.name} is a number in {spec.unit}")
    number = as_decimal(entry)
    if number is None:
        return Reason("not-a-number", spec.name, "a finite number", f"{spec.label} is not a usable number.")
    if spec.least is not None and spec.most is not None and not spec.least <= number <= spec.most:
        text = f"{spec.label} is outside {spec.limit}: check the entry and its unit."
        return Reason("out-of-range", spec.name, spec.limit, text)
    return number


@dataclass(frozen=True, slots=True)
class Weighed:
    """What the conditions of a computation or classification say about the entries."""

    reasons: tuple[Reason, ...]
    cautions: tuple[str, ...]
    unrecorded: tuple[str, ...]


def weigh(conditions: Iterable[Condition], entries: Entries) -> Weighed:
    """Reasons to refuse, cautions to print, and what nobody recorded.

    A condition that would refuse, on an entry nobody recorded, is named as such: unknown is not absent.
    """
    reasons: list[Reason] = []
    cautions: list[str] = []
    unrecorded: list[str] = []
    for condition in conditions:
        value = entries.values.get(condition.input)
        if value is None or isinstance(value, str):
            if condition.effect == "refuse":
                unrecorded.append(f"{load().inputs[condition.input].label}: {condition.text}")
        elif on_side(value, condition.comparator, condition.value):
            if condition.effect == "refuse":
                limit = f"refused when {condition.comparator} {_words(condition.value)}"
                reasons.append(Reason("not-valid", condition.input, limit, condition.text))
            else:
                cautions.append(condition.text)
    return Weighed(tuple(reasons), tuple(dict.fromkeys(cautions)), tuple(dict.fromkeys(unrecorded)))


def _words(value: Decimal | bool) -> str:
    return ("yes" if value else "no") if isinstance(value, bool) else str(value)
