"""Entries and facts in plain words: what, from where, and how long before the examination."""

from __future__ import annotations

from collections.abc import Iterable
from typing import Final

from fhirgallop.codes import units
from fhirgallop.exam import catalogue
from fhirgallop.exam.context import Source, State
from fhirgallop.exam.entry import Measure, Qualifier
from fhirgallop.reasoning.items import Ground, Item
from fhirgallop.reasoning.vocabulary import Cutoff, kinds

_SOURCES: Final = {
    Source.EXAM: "this examination",
    Source.ECG: "ECG",
    Source.MONITOR: "monitor",
    Source.ECHO: "echo",
    Source.CATHETER: "catheter",
    Source.LABORATORY: "laboratory",
    Source.IMAGING: "imaging",
    Source.PROBLEM_LIST: "problem list",
    Source.PROCEDURE: "procedure",
    Source.DEVICE: "device",
    Source.DEMOGRAPHICS: "patient record",
    Source.EARLIER_EXAM: "earlier examination",
    Source.REPORT: "report",
    Source.OTHER: "chart",
}
_STATES: Final = {
    State.PRESENT: "present",
    State.ABSENT: "absent",
    State.HISTORY: "in the history",
    State.REFUTED: "ruled out",
    State.UNCERTAIN: "uncertain",
}
_OF_SUBJECT: Final = {"subject.grade": "its loudness grade", "subject.scale": "the scale of its grade"}
_SPANS: Final = {"a": "year", "mo": "month", "wk": "week", "d": "day", "h": "hour"}
_UNITS: Final = ((31_557_600, "year"), (2_629_800, "month"), (86_400, "day"), (3_600, "hour"), (60, "minute"))


def label(id_: str) -> str:
    """The clinical words of an id; of `id#property` with the property."""
    if id_ in _OF_SUBJECT:
        return _OF_SUBJECT[id_]
    fact, _, axis = id_.partition("#")
    known = kinds().get(fact)
    words = known.label if known else fact
    if not axis:
        return words
    axes = catalogue.load().axes
    return f"{words}: {axes[axis].label.lower() if axis in axes else axis}"


def said(item: Item) -> str:
    """What an entry says: `Fourth heart sound: present (left-sided)`."""
    if item.measure is not None:
        words = number(item.measure)
    elif item.answers:
        words = ", ".join(answer(item.id, answer_) for answer_ in item.answers)
        if item.state is not State.PRESENT:
            words = f"{words}, {_STATES[item.state]}"
    else:
        words = _STATES[item.state]
    # how a chart's entry was found is told by its source
    told = (q for q in item.qualifiers if item.of_exam or q.axis != "method")
    described = ", ".join(_qualifier(q) for q in told)
    return f"{label(item.id)}: {words}" + (f" ({described})" if described else "")


def number(measure: Measure) -> str:
    """A number with its printed unit; years and days in words."""
    unit = units.table().by_code.get(measure.unit)
    printed = unit.printed if unit and unit.printed not in ("1", "ratio") else ""
    if measure.unit in _SPANS:
        printed = _SPANS[measure.unit] + ("" if measure.value == 1 and measure.high is None else "s")
    span = f"{measure.value:f}" if measure.high is None else f"{measure.value:f} to {measure.high:f}"
    return f"{measure.comparator}{span} {printed}".rstrip()


def answer(id_: str, value_id: str) -> str:
    """The printed form of a value of a choice."""
    definition = catalogue.load().findings.get(id_)
    if definition is not None and definition.answers:
        value = catalogue.load().axes[definition.answers].values.get(value_id)
        if value is not None:
            return value.label
    return value_id.replace("-", " ")


def axis(id_: str) -> str:
    """The printed name of a property."""
    known = catalogue.load().axes.get(id_)
    return known.label.lower() if known else id_


def source(id_: str) -> str:
    """The printed name of a source."""
    return _SOURCES[Source(id_)]


def _qualifier(qualifier: Qualifier) -> str:
    axis = catalogue.load().axes.get(qualifier.axis)
    if qualifier.grade is not None:
        return f"grade {qualifier.grade}"
    value = axis.values.get(qualifier.value) if axis else None
    if value is not None and qualifier.axis == "suspected-lesion":
        # the examiner's guess, never a fact
        return f"suspected: {value.label}"
    if value is not None:
        # "softer" alone says nothing without the manoeuvre
        return (
            f"{axis.label}: {value.label}" if axis and qualifier.axis.startswith("response.") else value.label
        )
    return qualifier.value or qualifier.text


def origin(item: Item) -> str:
    """Where it comes from and how old it is: `ECG, 20 minutes before, Observation/7`."""
    parts = [_SOURCES[item.source]]
    if not item.of_exam:
        if item.source is not Source.DEMOGRAPHICS:
            parts.append(age(item.age, clock=item.clock))
        if item.low_trust:
            parts.append("less trusted")
        if item.place:
            parts.append(item.place)
    return ", ".join(parts)


def entry(item: Item) -> str:
    """What an entry says and where it comes from."""
    return f"{said(item)} [{origin(item)}]"


def entries(several: Iterable[Item]) -> list[str]:
    """The same of many; those that say the same from one kind of source and one time are told once."""
    alike: dict[str, list[Item]] = {}
    for item in several:
        place = "" if item.of_exam else f"{item.source} {age(item.age, clock=item.clock)} {item.low_trust}"
        alike.setdefault(f"{said(item)} {place}", []).append(item)
    return [
        entry(group[0]) + (f" and {len(group) - 1} more that say the same" if len(group) > 1 else "")
        for group in alike.values()
    ]


def ground(one: Ground) -> str:
    """The same, with what weakens it in this use."""
    return f"{entry(one.item)}{' - out of date for this' if one.stale else ''}"


def cutoff(used: Cutoff) -> str:
    """A cut-off in force, with its source and the other published values."""
    others = ", ".join(f"{value:f} ({source})" for value, source in used.alternatives)
    also = f"; also published: {others}" if others else ""
    return f"{used.name} {used.value:f} {used.unit} ({used.source}{also})"


def age(seconds: int | None, *, clock: bool = True) -> str:
    """How long before the examination; without a time of day no finer than a day."""
    if seconds is None:
        return "time not known"
    if not clock and abs(seconds) < 86_400:
        return "same day"
    if abs(seconds) < 60:
        return "at the same time"
    return f"{span(abs(seconds))} {'before' if seconds > 0 else 'after'}"


def span(seconds: int) -> str:
    """A length of time in its largest whole unit: `20 minutes`."""
    for length, name in _UNITS:
        count = seconds // length
        if count:
            return f"{count} {name}{'s' * (count > 1)}"
    return f"{seconds} seconds"


def items(grounds: Iterable[Ground]) -> list[Item]:
    """The items of grounds, each once, today's entries first."""
    found = {one.item.key: one.item for one in grounds}
    return sorted(found.values(), key=lambda item: (not item.of_exam, item.key))
