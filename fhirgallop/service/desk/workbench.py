"""A draft as its page shows it: fields, what may be done with one of them, faults, and a record tried."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any, Final

from fhirgallop.exam import catalogue
from fhirgallop.mapping.reading import read_map
from fhirgallop.mapping.suggest import RECORD, Suggestion, suggest
from fhirgallop.mapping.suggest_values import Target, suggest_values
from fhirgallop.mapping.template_map import TemplateMap
from fhirgallop.outcome import Issue, has_errors
from fhirgallop.service.desk.brought import Brought, FieldSeen
from fhirgallop.service.desk.changes import is_pair, meanings_of, target_words
from fhirgallop.service.desk.uses import Use, Uses, axis_label, label, uses
from fhirgallop.storage.drafts import Draft

PAGE: Final = 100  # fields shown at once
_WORDINGS: Final = 60
PARTS: Final[Mapping[str, str]] = {
    "patient": "the patient's number",
    "identifier": "the examination's number",
    "time": "when it took place",
    "encounter": "the visit's number",
    "examiner": "who examined",
    "status": "how far it has got",
}


@dataclass(frozen=True, slots=True)
class Offer:
    """A suggestion as it is shown.

    Attributes:
        target: `finding`, `finding#axis` or `record#part`.
        words: what it is.
        why: the reasons.
        meanings: (wording, meaning) that would be put in with it.
        side: the side that the name tells.
    """

    target: str
    words: str
    why: tuple[str, ...]
    meanings: tuple[tuple[str, str], ...]
    side: str


@dataclass(frozen=True, slots=True)
class Meant:
    """A use of the chosen field whose wordings can be given meanings.

    Attributes:
        use: the use.
        axis: the property, where the field describes a finding; else empty.
        rows: (wording, how often it was met, its meaning now, True when the meaning is longer than a word).
        options: (id, words) of what a wording may mean.
        unit, decimal: of a number; unit is None where the line reads none.
        blank: what a blank box means; empty where the map says it.
        separator: sign between several wordings.
    """

    use: Use
    axis: str
    rows: tuple[tuple[str, int, str, bool], ...]
    options: tuple[tuple[str, str], ...]
    unit: str | None = None
    decimal: str = ""
    blank: str = ""
    separator: str = ""

    @property
    def open(self) -> int:
        """Wordings that were met and mean nothing yet."""
        return sum(1 for _, _, meaning, longer in self.rows if not meaning and not longer)


@dataclass(frozen=True, slots=True)
class Bench:
    """Everything the page of a draft needs."""

    draft: Draft
    brought: Brought
    uses: Uses
    template: TemplateMap | None
    faults: Sequence[Issue]
    chosen: FieldSeen | None
    offers: tuple[Offer, ...]
    meant: tuple[Meant, ...]
    states: Mapping[str, str] = field(default_factory=dict)

    def shown(self, show: str, search: str = "") -> list[FieldSeen]:
        """The fields of one state (`all` for every one) whose name or label holds the words."""
        words = search.casefold()
        return [
            seen
            for name, seen in self.brought.fields.items()
            if show in ("all", self.states[name]) and words in f"{name} {seen.label}".casefold()
        ]

    def count(self, state: str) -> int:
        """How many fields are in a state."""
        return sum(1 for one in self.states.values() if one == state)

    def after(self, name: str, state: str = "open") -> str:
        """The next field in that state after one, in a ring; empty where none is left."""
        names = list(self.brought.fields)
        at = names.index(name) + 1 if name in names else 0
        return next((one for one in (*names[at:], *names[:at]) if self.states[one] == state), "")

    def missing(self) -> list[str]:
        """The record's parts that no line tells yet, of those that a map must have."""
        told = {use.says for found in self.uses.by_field.values() for use in found if use.kind == "record"}
        return [part for part in ("patient", "identifier", "time") if part not in told]

    def lines(self) -> list[tuple[int, str, str]]:
        """(place, words, finding id) of every line with a finding, for boxes that describe one."""
        found: dict[int, tuple[int, str, str]] = {}
        for name, found_uses in self.uses.by_field.items():
            for use in found_uses:
                if use.at is not None and use.kind in ("finding", "condition") and use.value.get("finding"):
                    finding = str(use.value["finding"])
                    found.setdefault(use.at, (use.at, f"{label(finding)} (from {name})", finding))
        return [found[at] for at in sorted(found)]


def bench(draft: Draft, brought: Brought, name: str) -> Bench:
    """The draft with one field chosen; without a name, or with one nobody knows, the first that is open."""
    found = uses(draft.text)
    states = {one: found.state(one) for one in brought.fields}
    template, faults = read_map(draft.text)
    chosen = brought.fields.get(name)
    if chosen is None:
        chosen = next((seen for one, seen in brought.fields.items() if states[one] == "open"), None)
    offers: tuple[Offer, ...] = ()
    meant: tuple[Meant, ...] = ()
    if chosen is not None:
        of_field = found.of(chosen.name)
        meant = tuple(one for use in of_field for one in _meant(use, chosen))
        if not of_field:
            offers = tuple(_offer(one, chosen) for one in _suggestions(chosen))
    usable = None if has_errors(faults) else template
    return Bench(draft, brought, found, usable, faults, chosen, offers, meant, states)


def _suggestions(seen: FieldSeen) -> list[Suggestion]:
    name = seen.label or seen.name
    found = suggest(name, values=seen.wordings, section=seen.section, unit=seen.unit)
    if is_pair(seen):
        pair = Suggestion(Target("pressure.systolic"), 1.0, ("two numbers, written as a blood pressure is",))
        found = [pair, *(one for one in found if not one.target.finding.startswith("pressure."))][:3]
    return [one for one in found if _fits(one)]


def _fits(one: Suggestion) -> bool:
    known = catalogue.load().findings.get(one.target.finding)
    return known is None or bool(one.target.axis) or known.kind != "panel"


def _offer(one: Suggestion, seen: FieldSeen) -> Offer:
    words = target_words(one.target) + (f", {one.side}" if one.side else "")
    said = {seen.labels.get(value, value): value for value in list(seen.values)[:_WORDINGS]}
    known = dict(meanings_of(one.target)) if one.target.finding != RECORD else {}
    found = suggest_values(one.target, said) if known else {}
    pairs = tuple((said[wording], known[meaning]) for wording, meaning in found.items() if meaning in known)
    return Offer(str(one.target), words, one.reasons, pairs, one.side)


def _meant(use: Use, seen: FieldSeen) -> list[Meant]:
    value = use.value
    if use.kind == "finding" and value.get("finding"):
        choices = value.get("choices") if isinstance(value.get("choices"), Mapping) else {}
        held = value.get("choice") or (choices or {}).get("values") or {}
        number = value.get("number") if isinstance(value.get("number"), Mapping) else None
        return [
            Meant(
                use, "", _rows(held, seen, numbers=number is not None or bool(value.get("text"))),
                tuple(meanings_of(Target(str(value["finding"])))),
                str(number.get("unit", "")) if number else None,
                str(number.get("decimal", "")) if number else "",
                str(value.get("blank-means") or ""), str((choices or {}).get("separator") or ""),
            )
        ]  # fmt: skip
    if use.kind == "qualifier":
        return [
            Meant(
                use,
                axis,
                _rows(source.get("choice") or {}, seen, numbers="grade" in source),
                tuple(meanings_of(Target(str(value.get("finding") or ""), axis))),
            )
            for axis, source in (value.get("qualifiers") or {}).items()
            if isinstance(source, Mapping) and source.get("field") == seen.name
        ]
    return []


def _rows(held: Any, seen: FieldSeen, *, numbers: bool) -> tuple[tuple[str, int, str, bool], ...]:
    """Of a box with numbers or free words only the wordings that have a meaning are listed."""
    held = held if isinstance(held, Mapping) else {}
    names = list(held) if numbers else list(dict.fromkeys([*seen.values, *held]))
    return tuple(
        (
            name, seen.values.get(name, 0),
            "" if isinstance(held.get(name), Mapping) else str(held.get(name) or ""),
            isinstance(held.get(name), Mapping),
        )
        for name in names[:_WORDINGS]
    )  # fmt: skip


def properties(finding: str) -> list[tuple[str, str]]:
    """(axis, words) of what can be said of a finding besides."""
    known = catalogue.load().findings.get(finding)
    return (
        sorted(((axis, axis_label(axis)) for axis in known.qualifiers), key=lambda one: one[1])
        if known
        else []
    )
