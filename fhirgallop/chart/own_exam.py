"""Examinations that fhirgallop itself wrote, read back from their Observations by our own codes alone.

The reverse of `fhirgallop.observations`. Only what a review uses comes back: findings, answers, numbers,
properties, times; not the notes, the local words or the examiner. What was taken back (cancelled, entered in
error) is left out.
"""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Final

from fhirgallop.chart.amounts import measure
from fhirgallop.chart.elements import Element, codes, element, elements, reference, text, value_names
from fhirgallop.chart.gather import Found
from fhirgallop.chart.known import known
from fhirgallop.chart.log import Log
from fhirgallop.chart.reading import by_place, modified
from fhirgallop.chart.times import Times
from fhirgallop.codes import systems
from fhirgallop.exam import catalogue
from fhirgallop.exam.catalogue import FindingDefinition
from fhirgallop.exam.entry import Entry, Grade, Measure, Qualifier
from fhirgallop.exam.exam import Exam, Party
from fhirgallop.exam.moment import Moment
from fhirgallop.exam.presence import Presence

_GRADE: Final = re.compile(r"([1-9])(?:-to-([1-9]))?-of-([1-9])", re.ASCII)
_WITHDRAWN: Final = frozenset({"cancelled", "entered-in-error"})
_PRESENCE: Final = "presence"
_SITE: Final = "site"
_NOT_DONE: Final = "not-done"


@dataclass(frozen=True, slots=True)
class Gathered:
    """The Observations of one examination, before they are read.

    Attributes:
        start: FHIR dateTime of the examination.
        encounter: FHIR id; empty when none is named.
        members: each Observation with its own time.
    """

    start: str
    encounter: str
    members: tuple[tuple[Found, str], ...]


@dataclass(frozen=True, slots=True)
class OwnExam:
    """One examination, and the Observations it was read from (their names, by finding)."""

    exam: Exam
    found: tuple[Found, ...]
    names: Mapping[str, str]


def gather_own_exams(chart: Sequence[Found], times: Times) -> list[Gathered]:
    """Every examination of ours among the resources, in the order of the chart.

    Observations belong together that one panel names as its members; without a panel, those of one encounter
    and one time. An Observation that names no time, or one in the future, is left out.

    Args:
        chart: the patient's own resources, those of other patients already left out.
        times: reads times against the moment of review.
    """
    places = by_place(chart)
    ours = [found for found in chart if found.type == "Observation" and _finding(found.resource)]
    moments = {id(found): times.of(found.resource, "effective", found.place) or "" for found in ours}
    panels: dict[int, tuple[str, str]] = {}
    for found in ours:
        if moments[id(found)]:
            for member in elements(found.resource.get("hasMember")):
                target = places.get(reference(member))
                if target is not None:
                    panels.setdefault(id(target), (_encounter(found), moments[id(found)]))
    groups: dict[tuple[str, str], list[tuple[Found, str]]] = {}
    for found in ours:
        written = moments[id(found)]
        if written and text(found.resource.get("status")) not in _WITHDRAWN:
            key = panels.get(id(found), (_encounter(found), written))
            groups.setdefault(key, []).append((found, written))
    return [Gathered(start, encounter, tuple(members)) for (encounter, start), members in groups.items()]


def read_own_exam(gathered: Gathered, patient: Party, log: Log) -> OwnExam:
    """The examination that these Observations say; one without entries where they say nothing of their own.

    Args:
        gathered: Observations that belong together.
        patient: whose.
        log: takes what could not be read.
    """
    entries: list[Entry] = []
    names: dict[str, str] = {}
    for found, written in gathered.members:
        for entry in _entries(found, log):
            entries.append(entry if written == gathered.start else replace(entry, time=written))
            names.setdefault(entry.finding, found.name if found.id else "")
    statuses = {text(found.resource.get("status")) for found, _ in gathered.members}
    exam = Exam(
        patient=patient,
        identifier=gathered.start,
        identifier_system="",
        time=Moment(gathered.start),
        entries=tuple(_told_apart(_joined(entries))),
        status="preliminary" if "preliminary" in statuses else "final",
        encounter=Party(gathered.encounter, is_fhir_id=True) if gathered.encounter else None,
    )
    return OwnExam(exam, tuple(found for found, _ in gathered.members), names)


def _finding(holder: Element) -> FindingDefinition | None:
    """The finding that the code of an Observation, or of a component, names in our own code system."""
    named = [code.code for code in codes(holder.get("code")) if code.system == systems.FINDINGS]
    return catalogue.load().findings.get(named[0]) if len(named) == 1 else None


def _encounter(found: Found) -> str:
    literal = reference(element(found.resource.get("encounter"))).partition("/_history/")[0]
    return literal.rpartition("/")[2]


def _entries(found: Found, log: Log) -> Iterator[Entry]:
    resource = found.resource
    definition = _finding(resource)
    if definition is None:
        return
    if modified(resource) or any(modified(c) for c in elements(resource.get("component"))):
        words = "An extension may turn the meaning of this round; nothing at this place is used."
        log.add("warning", "not-supported", "chart-modifier", words, found.place)
        return
    components = tuple(elements(resource.get("component")))
    described = tuple(
        sorted(
            (q for part in components for q in _property(part)), key=lambda q: (q.axis, q.value, str(q.grade))
        )
    )
    if definition.kind != "panel":
        site = _site(resource, definition)
        entry = _entry(resource, definition, log, found.place)
        if entry is not None:
            yield replace(entry, qualifiers=_fitting((*described, *site), definition))
        return
    for index, part in enumerate(components):
        inner = _finding(part)
        if inner is None:
            continue
        entry = _entry(part, inner, log, f"{found.place}.component[{index}]")
        if entry is not None:
            yield replace(entry, qualifiers=_fitting(described, inner))


def _entry(holder: Element, definition: FindingDefinition, log: Log, place: str) -> Entry | None:
    """What an Observation or a component says of a finding; None where it says nothing that is known here."""
    absent = holder.get("dataAbsentReason")
    names = value_names(holder)
    if absent is not None:
        said = _own(absent, _PRESENCE)
        looked = said in (Presence.NOT_EXAMINED, Presence.NOT_EXAMINABLE)
        return Entry(definition.id, Presence(said)) if looked and not names else None
    if len(names) != 1:
        return None
    value = holder[names[0]]
    presence = _own(value, _PRESENCE)
    if presence:
        return Entry(definition.id, Presence(presence)) if presence in tuple(Presence) else None
    if definition.kind == "quantity":
        number = _number(names[0], value, definition, log, place)
        return Entry(definition.id, measure=number) if number else None
    if definition.kind == "text":
        words = text(value)
        return Entry(definition.id, text=words) if words else None
    answer = _own(value, definition.answers)
    if answer in catalogue.load().answers(definition):
        return Entry(definition.id, answers=(answer,))
    words = text(element(value).get("text"))
    if definition.kind == "choice" and words and not codes(value):
        return Entry(definition.id, text=words)
    text_ = "No value of our own code systems stands here; the finding stays unknown."
    log.add("information", "code-invalid", "chart-own-value", text_, place)
    return None


def _number(name: str, value: object, definition: FindingDefinition, log: Log, place: str) -> Measure | None:
    return measure(name, value, known()[definition.id], log, f"{place}.{name}")


def _own(concept: object, axis: str) -> str:
    """The value that our own qualifier system gives on an axis; empty when none, or more than one."""
    prefix = f"{axis}:"
    found = {
        code.code.removeprefix(prefix)
        for code in codes(concept)
        if code.system == systems.QUALIFIERS and code.code.startswith(prefix)
    }
    return found.pop() if len(found) == 1 else ""


def _property(component: Element) -> Iterator[Qualifier]:
    """The qualifier that a component is."""
    axes = catalogue.load().axes
    for code in codes(component.get("code")):
        if code.system != systems.QUALIFIERS or code.code not in axes:
            continue
        axis = axes[code.code]
        if component.get("dataAbsentReason") is not None:
            # the only reason ever written: a manoeuvre that was not done
            yield from [Qualifier(axis.id, _NOT_DONE)] if _NOT_DONE in axis.values else []
            return
        value = component.get("valueCodeableConcept")
        said = _own(value, axis.id)
        graded = _GRADE.fullmatch(said)
        if said in axis.values:
            yield Qualifier(axis.id, said)
        elif graded:
            low, high, of = graded.groups()
            yield Qualifier(axis.id, grade=Grade(int(low), int(high or low), int(of)))
        elif not codes(value) and (words := text(element(value).get("text"))):
            yield Qualifier(axis.id, text=words)


def _site(resource: Element, definition: FindingDefinition) -> tuple[Qualifier, ...]:
    """The place, where it is not the one that the finding itself fixes."""
    value = _own(resource.get("bodySite"), _SITE)
    if not value or value == definition.site or value not in catalogue.load().axes[_SITE].values:
        return ()
    return (Qualifier(_SITE, value),)


def _fitting(described: Sequence[Qualifier], definition: FindingDefinition) -> tuple[Qualifier, ...]:
    fitting = {q: None for q in described if q.axis in definition.qualifiers}
    return tuple(sorted(fitting, key=lambda q: (q.axis, q.value)))


def _joined(entries: Sequence[Entry]) -> list[Entry]:
    """Several answers to one question as one entry, as they were given (FHIR: one value, one Observation)."""
    found: dict[object, Entry] = {}
    for index, entry in enumerate(entries):
        key: object = (entry.finding, entry.qualifiers, entry.time) if entry.answers else index
        other = found.get(key)
        answers = entry.answers if other is None else (*other.answers, *entry.answers)
        found[key] = replace(entry, answers=tuple(dict.fromkeys(answers)))
    return list(found.values())


def _told_apart(entries: Sequence[Entry]) -> Iterator[Entry]:
    """Entries of one finding numbered, so that each has a key of its own."""
    counts: dict[str, int] = {}
    for entry in entries:
        counts[entry.finding] = counts.get(entry.finding, 0) + 1
    seen: dict[str, int] = {}
    for entry in entries:
        seen[entry.finding] = seen.get(entry.finding, 0) + 1
        yield replace(entry, instance=str(seen[entry.finding])) if counts[entry.finding] > 1 else entry
