"""A kept Bundle as an examination to be read: what was said, by part of the examination, in plain words."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime
from html import unescape
from typing import Final

from fhirgallop.chart.elements import Element, element, elements, identifiers, text
from fhirgallop.chart.gather import Found, gather
from fhirgallop.chart.log import Log
from fhirgallop.chart.own_exam import Gathered, OwnExam, gather_own_exams, read_own_exam
from fhirgallop.chart.times import Times
from fhirgallop.codes import fhirjson, systems
from fhirgallop.exam import catalogue
from fhirgallop.exam.entry import Entry
from fhirgallop.exam.exam import Exam, Party
from fhirgallop.exam.moment import Moment
from fhirgallop.exam.presence import Presence
from fhirgallop.service.views.wording import SECTIONS, properties, said

_WITHDRAWN: Final = frozenset({"cancelled", "entered-in-error"})


@dataclass(frozen=True, slots=True)
class Line:
    """One thing that was said.

    Attributes:
        finding: catalogue id.
        label: its clinical name.
        presence: what was said of it; decides how it is shown.
        words: the answer, number or presence.
        properties: what else was said of it.
        notes: remarks of the examiner, as written.
        local: the form's own wording, where the map keeps it.
        time: moment of its own; empty for the examination's.
    """

    finding: str
    label: str
    presence: Presence
    words: str
    properties: tuple[str, ...]
    notes: tuple[str, ...]
    local: str
    time: str


@dataclass(frozen=True, slots=True)
class Part:
    """One part of the examination, as its lines stand in the catalogue's section."""

    title: str
    lines: tuple[Line, ...]


@dataclass(frozen=True, slots=True)
class Head:
    """What tells one examination from another; patient and examiner as `value (system)`.

    Attributes:
        status: of the report: final, preliminary, amended, corrected, entered-in-error.
        number: the sender's number of it.
    """

    patient: Party
    time: str
    status: str
    number: str
    examiner: str
    encounter: str


@dataclass(frozen=True, slots=True)
class Examination:
    """One version of an examination.

    Attributes:
        head: whose, when, who.
        own: what a review uses of it.
        parts: everything that was said, in the order of the examination.
        taken_back: findings that the sender took back.
        notes: remarks on the whole.
        names: identifiers (system, value) of its resources, by which they are known again in a chart.
    """

    head: Head
    own: OwnExam
    parts: tuple[Part, ...]
    taken_back: tuple[str, ...]
    notes: tuple[str, ...]
    names: frozenset[tuple[str, str]]


def read_head(bundle: bytes) -> Head:
    """Whose, when and who, of a kept Bundle."""
    return _head(_resources(fhirjson.read(bundle)[0]))


def read_examination(bundle: bytes, now: datetime) -> Examination:
    """A kept Bundle of ours; `now` is the moment of reading, with a zone."""
    value = fhirjson.read(bundle)[0]
    head = _head(_resources(value))
    log = Log()
    chart = gather(value, log)
    own = _own(chart, head, now, log)
    lines: dict[str, list[Line]] = {}
    taken_back: dict[str, None] = {}
    for found in chart:
        if found.type != "Observation":
            continue
        if text(found.resource.get("status")) in _WITHDRAWN:
            taken_back[text(element(found.resource.get("code")).get("text"))] = None
            continue
        for section, line in _lines(found, head, log):
            lines.setdefault(section, []).append(line)
    parts = tuple(Part(title, tuple(lines[id_])) for id_, title in SECTIONS.items() if id_ in lines)
    names = frozenset(name for found in chart for name in identifiers(found.resource.get("identifier")))
    return Examination(head, own, parts, tuple(filter(None, taken_back)), tuple(_notes(chart)), names)


def _resources(bundle: Element) -> list[Element]:
    return [element(entry.get("resource")) for entry in elements(bundle.get("entry"))]


def _head(resources: Sequence[Element]) -> Head:
    by_type: dict[str, Element] = {}
    for resource in resources:
        by_type.setdefault(text(resource.get("resourceType")), resource)
    report = by_type.get("DiagnosticReport") or by_type.get("Observation") or {}
    sources = list(elements(element(by_type.get("Provenance")).get("entity")))
    number = element(element(sources[0].get("what")).get("identifier")) if sources else {}
    performers = list(elements(report.get("performer")))
    return Head(
        _party(element(report.get("subject"))),
        _time(report),
        text(report.get("status")),
        text(number.get("value")),
        _named(performers[0]) if performers else "",
        _named(element(report.get("encounter"))),
    )


def _time(resource: Element) -> str:
    period = element(resource.get("effectivePeriod"))
    return text(resource.get("effectiveDateTime")) or text(period.get("start"))


def _party(reference: Element) -> Party:
    identifier = element(reference.get("identifier"))
    if text(identifier.get("value")):
        return Party(text(identifier.get("value")), text(identifier.get("system")))
    return Party(text(reference.get("reference")).rpartition("/")[2], is_fhir_id=True)


def _named(reference: Element) -> str:
    return text(reference.get("display")) or _party(reference).value


def _own(chart: Sequence[Found], head: Head, now: datetime, log: Log) -> OwnExam:
    gathered = gather_own_exams(chart, Times(now, log))
    # the panel's own time; a part that was taken at another time is a member of it
    ours = [one for one in gathered if one.start == head.time] or gathered
    if not ours:
        empty = Exam(head.patient, head.number, "", Moment(head.time), ())
        return OwnExam(empty, (), {})
    members = tuple(member for one in ours for member in one.members)
    own = read_own_exam(Gathered(ours[0].start, ours[0].encounter, members), head.patient, log)
    # on a page nobody follows a `urn:uuid:` to its Observation
    return OwnExam(own.exam, own.found, dict.fromkeys(own.names, ""))


def _lines(found: Found, head: Head, log: Log) -> Iterator[tuple[str, Line]]:
    """What one Observation says, with its section."""
    resource = found.resource
    written = _time(resource) or head.time
    alone = read_own_exam(Gathered(written, "", ((found, written),)), head.patient, log)
    notes = tuple(words for note in elements(resource.get("note")) if (words := _whole(note.get("text"))))
    entries = alone.exam.entries or tuple(_unread(resource))
    for entry in entries:
        definition = catalogue.load().findings[entry.finding]
        yield (
            definition.section,
            Line(
                entry.finding,
                definition.label,
                entry.presence,
                said(entry) + _reason(resource),
                properties(entry),
                notes,
                _local(element(resource.get("valueCodeableConcept"))),
                written if written != head.time else "",
            ),
        )


def _unread(resource: Element) -> Iterator[Entry]:
    """A finding whose value is in the clinician's own words only, which no rule uses."""
    known = catalogue.load().findings
    value = resource.get("valueCodeableConcept")
    words = _whole(element(value).get("text")) or _whole(resource.get("valueString"))
    for coding in elements(element(resource.get("code")).get("coding")):
        finding = text(coding.get("code"))
        if coding.get("system") == systems.FINDINGS and finding in known and words:
            yield Entry(finding, text=words)


def _whole(value: object) -> str:
    """A text of any length: what a clinician wrote is shown whole."""
    return value.strip() if isinstance(value, str) else ""


def _reason(resource: Element) -> str:
    """Why nobody looked, as the examiner wrote it behind the words for that."""
    _, colon, reason = text(element(resource.get("dataAbsentReason")).get("text")).partition(": ")
    return f": {reason}" if colon else ""


def _local(concept: Element) -> str:
    """The wording of the clinic's own form among the codings of a value."""
    chosen = (one for one in elements(concept.get("coding")) if one.get("userSelected") is True)
    return next((text(one.get("code")) for one in chosen), "")


def _notes(chart: Sequence[Found]) -> Iterator[str]:
    """Remarks on the whole: they stand in the report's narrative, after the list of what was found."""
    for found in chart:
        if found.type == "DiagnosticReport":
            _, _, after = _whole(element(found.resource.get("text")).get("div")).rpartition("</ul>")
            for note in after.split("<p>")[1:]:
                yield unescape(note.partition("</p>")[0])


def counted(parts: Sequence[Part]) -> Mapping[Presence, int]:
    """How many lines of each kind there are."""
    counts = dict.fromkeys(Presence, 0)
    for part in parts:
        for line in part.lines:
            counts[line.presence] += 1
    return counts
