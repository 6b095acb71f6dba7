"""One entry of an examination as one coded Observation.

Pattern (FHIR R4 Observation 10.1.4.4.3): the code is the finding, the value confirms or refutes it; a choice
or a number is the value of what was asked. What means nothing alone (a murmur's grade) is a component.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from functools import cache
from typing import Any, Final

from fhirgallop.codes import systems
from fhirgallop.exam.catalogue import Catalogue, load
from fhirgallop.exam.entry import Entry, Measure, Qualifier
from fhirgallop.exam.exam import Exam, Party
from fhirgallop.exam.moment import Moment
from fhirgallop.exam.presence import Presence
from fhirgallop.observations import absence, text
from fhirgallop.observations.fragments import SITE_AXIS, Fragments, Frame
from fhirgallop.observations.identity import Identities, identifier

# How the entry came to be known: read from a line of text, where others come from a box.
CAPTURE: Final = systems.BASE + "/CodeSystem/capture"
_READ_FROM_WORDS: Final = {
    "system": CAPTURE, "code": "read-from-words", "display": "Read from a line of text",
}  # fmt: skip


def reference(resource_type: str, party: Party) -> dict[str, Any]:
    """Reference to a patient, encounter or examiner: by FHIR id where known, else by identifier."""
    if party.is_fhir_id:
        return {"reference": f"{resource_type}/{party.value}"}
    named = {"system": party.system, "value": party.value} if party.system else {"value": party.value}
    return {"type": resource_type, "identifier": named}


def effective(moment: Moment) -> tuple[str, Any]:
    """Element and value of effective[x]; a time coarser than a day is a period (vs-1 asks for the day)."""
    if moment.end or not moment.precise_to_day:
        return "effectivePeriod", {"start": moment.start, "end": moment.end or moment.start}
    return "effectiveDateTime", moment.start


@dataclass(frozen=True, slots=True)
class Shared:
    """What all resources of one examination have in common."""

    identities: Identities
    status: str
    subject: dict[str, Any]
    encounter: dict[str, Any] | None
    performer: list[dict[str, Any]]
    effective_key: str
    effective_value: Any
    issued: str
    local_system: str

    @classmethod
    def of(cls, exam: Exam, issued: str) -> Shared:
        """The common parts of `exam`; `issued` is the instant of conversion."""
        performer = (
            reference("Practitioner", exam.examiner) if exam.examiner else {"display": "Examiner not stated"}
        )
        key, value = effective(exam.time)
        return cls(
            Identities(exam),
            exam.status,
            reference("Patient", exam.patient),
            reference("Encounter", exam.encounter) if exam.encounter else None,
            [performer],
            key,
            value,
            issued,
            exam.local_system,
        )


class ObservationBuilder:
    """Builds Observations as plain dictionaries; parts that never change are shared between them."""

    def __init__(self, catalogue: Catalogue, *, snomed: bool = True) -> None:
        self.catalogue = catalogue
        self._fragments = Fragments(catalogue, snomed=snomed)

    def all_of(self, exam: Exam, shared: Shared) -> list[tuple[str, dict[str, Any]]]:
        """Every entry of `exam` as (identity, Observation), panels gathered, in the order of the entries."""
        found: dict[str, dict[str, Any]] = {}
        gathered: dict[tuple[str, str], list[Entry]] = {}
        frames = self._fragments.frames
        for entry in exam.entries:
            definition = frames[entry.finding].definition
            if definition.within or definition.kind == "panel":
                gathered.setdefault((definition.within or definition.id, entry.instance), []).append(entry)
            else:
                for one in entry.by_answer():
                    self._add(found, one, shared)
        for (panel, instance), parts in gathered.items():
            urn = shared.identities.of(panel, instance)
            found[urn] = self._panel(frames[panel], parts, shared, urn)
        return list(found.items())

    def _add(self, found: dict[str, dict[str, Any]], entry: Entry, shared: Shared) -> None:
        urn = shared.identities.of(entry.finding, entry.instance)
        found[urn] = self.observation(entry, shared, urn)

    def observation(self, entry: Entry, shared: Shared, urn: str) -> dict[str, Any]:
        """The Observation of one entry that stands alone."""
        frame = self._fragments.frames[entry.finding]
        resource = self._head(frame, entry, shared, urn)
        value_words = self._value(resource, frame, entry, shared)
        notes = _notes(entry)
        if notes:
            resource["note"] = notes
        qualifiers, site = _site_apart(entry, frame)
        body_site = self._fragments.answers[SITE_AXIS, site].concept if site else frame.body_site
        if body_site:
            resource["bodySite"] = body_site
        if frame.method:
            resource["method"] = frame.method
        words = f"{frame.label}: {value_words}"
        if site:
            words = f"{words}, {self._fragments.answers[SITE_AXIS, site].words}"
        if qualifiers:
            component = self._fragments.component
            parts = [component(qualifier) for qualifier in qualifiers]
            resource["component"] = [part for part, _ in parts]
            words = f"{words} ({'; '.join(said for _, said in parts)})"
        resource["text"] = text.narrative(words, withdrawn=resource["status"] == "entered-in-error")
        return resource

    def _head(self, frame: Frame, entry: Entry, shared: Shared, urn: str) -> dict[str, Any]:
        code = frame.code if entry.presence is Presence.PRESENT else frame.code_unless_present
        if shared.local_system and entry.fields:
            local = {"system": shared.local_system, "code": text.code(entry.fields[0])}
            code = {"coding": [*code["coding"], local], "text": code["text"]}
        status = "preliminary" if entry.preliminary and shared.status == "final" else shared.status
        resource: dict[str, Any] = {
            "resourceType": "Observation",
            "meta": {**frame.meta, "tag": [_READ_FROM_WORDS]} if entry.words else frame.meta,
            "text": None,
            "identifier": identifier(urn),
            "status": "entered-in-error" if entry.withdrawn else status,
            "category": frame.category,
            "code": code,
            "subject": shared.subject,
        }
        if shared.encounter:
            resource["encounter"] = shared.encounter
        if entry.time:
            key, value = effective(Moment(entry.time))
            resource[key] = value
        else:
            resource[shared.effective_key] = shared.effective_value
        resource["issued"] = shared.issued
        resource["performer"] = shared.performer
        return resource

    def _value(self, target: dict[str, Any], frame: Frame, entry: Entry, shared: Shared) -> str:
        """Sets value, or why there is none, and interpretation; returns the words for the narrative."""
        presence = entry.presence
        if presence is Presence.NOT_EXAMINED or presence is Presence.NOT_EXAMINABLE:
            said = self._fragments.presence[presence]
            coding = self._fragments.presence_coding[presence]
            reason = text.plain(entry.reason)
            target["dataAbsentReason"] = absence.data_absent_reason(
                presence, said.concept["text"], coding, reason
            )
            return f"{said.words}: {text.escaped(reason)}" if reason else said.words
        if entry.measure is not None and presence is Presence.PRESENT:
            return _measured(target, frame, entry.measure)
        if entry.text:
            words = text.plain(entry.text)
            if frame.definition.kind == "text":
                target["valueString"] = words
            else:
                target["valueCodeableConcept"] = {"text": words}
            return text.escaped(words)
        if entry.answers and presence is Presence.PRESENT:
            said = self._fragments.answers[frame.definition.answers, entry.answers[0]]
            interpretation = said.interpretation
        else:
            said, interpretation = self._fragments.presence_said(presence, frame.definition)
        target["valueCodeableConcept"] = _with_local_words(said.concept, entry, shared)
        if interpretation:
            target["interpretation"] = absence.interpretation(interpretation)
        return said.words

    def _panel(self, frame: Frame, entries: Sequence[Entry], shared: Shared, urn: str) -> dict[str, Any]:
        """One Observation whose components are the parts of a panel (blood pressure)."""
        # A part that was taken back alone leaves the panel; the panel is taken back with its last part.
        entries = [entry for entry in entries if not entry.withdrawn] or entries
        resource = self._head(frame, _whole(entries), shared, urn)
        components: list[dict[str, Any]] = []
        words: list[str] = []
        notes: list[dict[str, str]] = []
        by_finding = {entry.finding: entry for entry in entries}
        for part in self.catalogue.parts.get(frame.definition.id, ()):
            entry = by_finding.get(part.id)
            part_frame = self._fragments.frames[part.id]
            component: dict[str, Any] = {"code": part_frame.code}
            if entry is None:
                component["dataAbsentReason"] = absence.unknown_part()
            else:
                words.append(f"{part_frame.label}: {self._value(component, part_frame, entry, shared)}")
                notes += _notes(entry)
            components.append(component)
        for qualifier in dict.fromkeys(q for entry in entries for q in entry.qualifiers):
            component, said = self._fragments.component(qualifier)
            components.append(component)
            words.append(said)
        if notes:
            resource["note"] = [note for n, note in enumerate(notes) if note not in notes[:n]]
        if frame.method:
            resource["method"] = frame.method
        resource["component"] = components
        withdrawn = resource["status"] == "entered-in-error"
        resource["text"] = text.narrative(f"{frame.label} ({'; '.join(words)})", withdrawn=withdrawn)
        return resource


def _whole(entries: Sequence[Entry]) -> Entry:
    """What holds of a panel as a whole: it was read from words as soon as one part was."""
    read = next((entry for entry in entries if entry.words), None)
    return replace(entries[0], words=read.words, preliminary=read.preliminary) if read else entries[0]


def _site_apart(entry: Entry, frame: Frame) -> tuple[Sequence[Qualifier], str]:
    """The qualifiers that become components, and the one site that becomes the bodySite (or none)."""
    if frame.sites_are_components or not entry.qualifiers:
        return entry.qualifiers, ""
    sites = [q.value for q in entry.qualifiers if q.axis == SITE_AXIS and q.value]
    if len(sites) != 1:
        return entry.qualifiers, ""
    return [q for q in entry.qualifiers if q.axis != SITE_AXIS], sites[0]


def _measured(target: dict[str, Any], frame: Frame, measure: Measure) -> str:
    unit = frame.unit
    if measure.high is not None:
        target["valueRange"] = {
            "low": {"value": measure.value, **unit},
            "high": {"value": measure.high, **unit},
        }
        return f"{measure.value} to {measure.high} {text.escaped(unit.get('unit', ''))}"
    quantity: dict[str, Any] = {"value": measure.value}
    if measure.comparator:
        quantity["comparator"] = measure.comparator
    quantity.update(unit)
    target["valueQuantity"] = quantity
    return text.escaped(f"{measure.comparator}{measure.value} {unit.get('unit', '')}".rstrip())


def _with_local_words(concept: dict[str, Any], entry: Entry, shared: Shared) -> dict[str, Any]:
    if not (shared.local_system and entry.said):
        return concept
    local = {"system": shared.local_system, "code": text.code(entry.said), "userSelected": True}
    return {"coding": [*concept["coding"], local], "text": concept["text"]}


def _notes(entry: Entry) -> list[dict[str, str]]:
    notes = [{"text": words} for note in entry.notes if (words := text.plain(note))]
    if entry.measure is not None and entry.measure.original:
        notes.append({"text": f"Sent as {text.plain(entry.measure.original)}."})
    return notes


@cache
def builder(*, snomed: bool) -> ObservationBuilder:
    """The builder over the shipped catalogue."""
    return ObservationBuilder(load(), snomed=snomed)
