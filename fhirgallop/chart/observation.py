"""Observations as facts: rhythm, numbers, findings of earlier examinations, statements of reports.

Sources: FHIR R4 and R5 Observation (status, focus, component, value[x]), DiagnosticReport.conclusionCode.
"""

from __future__ import annotations

import re
from dataclasses import dataclass, replace
from datetime import datetime
from typing import Final

from fhirgallop.chart.amounts import implausible, measure
from fhirgallop.chart.elements import Code, Element, codes, elements, reference, text, value_names
from fhirgallop.chart.gather import Found
from fhirgallop.chart.known import Known, known
from fhirgallop.chart.presence import presence
from fhirgallop.chart.reading import Reading, grouped, modified
from fhirgallop.chart.tables import Statement
from fhirgallop.codes import systems
from fhirgallop.exam.context import Fact, Source, State
from fhirgallop.exam.entry import Grade, Measure, Qualifier
from fhirgallop.exam.exam import Exam

_DONE: Final = frozenset({"final", "amended", "corrected", "appended"})
_EARLY: Final = frozenset({"preliminary", "partial", "modified"})  # modified: R5, before it is final
_WITHDRAWN: Final = frozenset({"cancelled", "entered-in-error"})
# "Assertion": the value is the finding (HL7 v3 ActCode, used so by FHIR R4 Observation 10.1.4.4.3)
_ASSERTION: Final = Code("http://terminology.hl7.org/CodeSystem/v3-ActCode", "ASSERTION")
_GRADE: Final = re.compile(r"grade:([1-9])(?:-to-([1-9]))?-of-([1-9])", re.ASCII)
_RHYTHM: Final = "rhythm.diagnosis"
# The same number by echo and by catheter has two ids, for it does not go stale alike.
_BY_ECHO: Final = {
    "catheter.pa-systolic": "echo.pa-systolic-pressure",
    "catheter.right-atrial-pressure": "echo.right-atrial-pressure",
    "catheter.rv-systolic-pressure": "echo.rv-systolic-pressure",
}
_TWINS: Final = frozenset((*_BY_ECHO, *_BY_ECHO.values()))


@dataclass(frozen=True, slots=True)
class Frame:
    """What all facts of one resource share, and what their source is told by."""

    found: Found
    time: str
    encounter: str
    low_trust: bool
    methods: tuple[Code, ...]
    ours: bool


@dataclass(frozen=True, slots=True)
class Part:
    """A code with its value: an Observation, or a component that is a finding of its own."""

    head: tuple[Code, ...]
    holder: Element
    components: tuple[Element, ...]
    place: str

    @property
    def value(self) -> tuple[Code, ...]:
        """The codes of a coded value."""
        return codes(self.holder.get("valueCodeableConcept"))


def read_observation(found: Found, reading: Reading) -> None:
    """Adds every fact an Observation states."""
    observation = found.resource
    head = codes(observation.get("code"))
    components = tuple(elements(observation.get("component")))
    # most of a chart is of codes that have no meaning here; nothing more is asked of it
    if not (_is_known(head, reading) or any(_is_known(codes(c.get("code")), reading) for c in components)):
        reading.unknown += text(observation.get("status")) not in _WITHDRAWN
        return
    frame = _frame(found, reading, "effective")
    if frame is None:
        return
    if frame.ours and _of_this_exam(found, frame.time, reading.exam):
        # this very examination, already written to the chart
        return
    before = len(reading.facts)
    known_code = _read(Part(head, observation, components, found.place), frame, reading)
    describing = [_is_property(component, reading) for component in components]
    properties = tuple(c for c, describes in zip(components, describing, strict=True) if describes)
    for index, (component, describes) in enumerate(zip(components, describing, strict=True)):
        place = f"{found.place}.component[{index}]"
        if modified(component):
            reading.log.add("warning", "not-supported", "chart-modifier", _MODIFIED, place)
        elif not describes:
            part = Part(codes(component.get("code")), component, properties, place)
            known_code |= _read(part, frame, reading)
    if not known_code and len(reading.facts) == before:
        reading.unknown += 1


def _is_known(head: tuple[Code, ...], reading: Reading) -> bool:
    """Whether one of the codes says something in the tables, alone or with a value."""
    tables = reading.tables
    return any(
        code in tables.uses["observation"] or code in tables.questions or code == _ASSERTION for code in head
    )


def read_report(found: Found, reading: Reading) -> None:
    """Adds the coded conclusions of a DiagnosticReport: what a report says, it says of its own day."""
    conclusions = codes(found.resource.get("conclusionCode"))
    if not conclusions:
        return
    frame = _frame(found, reading, "effective")
    if frame is None:
        return
    said = [s for s in reading.statements("observation", conclusions) if known()[s.id].kind != "quantity"]
    # a rhythm is read from a report only where the code itself says that it was seen on a tracing
    tracing = reading.source("Observation", "code", conclusions)
    for id_, statement in grouped(said).items():
        if id_ == _RHYTHM and tracing is None:
            continue
        state = State.PRESENT if statement.present else State.ABSENT
        source = (
            tracing
            if id_ == _RHYTHM and tracing
            else reading.source("DiagnosticReport", "resource", (Code("", ""),))
        )
        _add(reading, frame, statement, state, source or Source.REPORT)


_MODIFIED: Final = "An extension may turn the meaning of this round; nothing at this place is used."


def _frame(found: Found, reading: Reading, stem: str) -> Frame | None:
    resource, log = found.resource, reading.log
    status = text(resource.get("status"))
    if status in _WITHDRAWN:
        return None
    if status not in _DONE and status not in _EARLY:
        words = "Only final, amended, corrected and preliminary results are read; this status is another one."
        log.add("information", "business-rule", "chart-status", words, found.place)
        return None
    if modified(resource):
        log.add("warning", "not-supported", "chart-modifier", _MODIFIED, found.place)
        return None
    if any(reading.whose.means(focus, found) is not True for focus in elements(resource.get("focus"))):
        words = "The focus is not the patient (a fetus, a donor, a device); nothing of it is used."
        log.add("warning", "business-rule", "chart-other-focus", words, f"{found.place}.focus")
        return None
    time = reading.times.of(resource, stem, found.place)
    if time is None:
        return None
    methods = codes(resource.get("method"))
    for component in elements(resource.get("component")):
        if "method" in _axes_of(component, reading):
            methods = (*methods, *codes(component.get("valueCodeableConcept")))
    return Frame(
        found,
        time,
        reading.encounter(found),
        status in _EARLY or _unattended(resource),
        methods,
        _is_ours(resource),
    )


def _of_this_exam(found: Found, time: str, exam: Exam) -> bool:
    if _same_moment(time, exam.time.start):
        return True
    # what was found on another day, such as an echo's numbers, stands under that day
    other_day = {entry.finding for entry in exam.entries if entry.time and _same_moment(time, entry.time)}
    own = (code.code for code in codes(found.resource.get("code")) if code.system == systems.FINDINGS)
    return bool(other_day) and not other_day.isdisjoint(own)


def _same_moment(one: str, other: str) -> bool:
    if len(one) > 10 and len(other) > 10:
        return datetime.fromisoformat(one) == datetime.fromisoformat(other)
    return one == other


def _unattended(resource: Element) -> bool:
    """True when only a machine, or the patient at home, stands behind it."""
    performers = [reference(p) or text(p.get("type")) for p in elements(resource.get("performer"))]
    if not performers:
        return resource.get("device") is not None
    return all(performer.startswith(("Patient", "RelatedPerson", "Device")) for performer in performers)


def _is_ours(resource: Element) -> bool:
    meta = resource.get("meta")
    profiles = meta.get("profile") if isinstance(meta, dict) else None
    return any(text(p).startswith(systems.BASE) for p in profiles) if isinstance(profiles, list) else False


def _axes_of(component: Element, reading: Reading) -> list[str]:
    return [reading.tables.axes[c] for c in codes(component.get("code")) if c in reading.tables.axes]


def _is_property(component: Element, reading: Reading) -> bool:
    """True for a component that describes the finding instead of being one."""
    found = codes(component.get("code"))
    return any(c in reading.tables.axes for c in found) and not reading.statements("observation", found)


def _read(part: Part, frame: Frame, reading: Reading) -> bool:
    """Reads one code with its value; True when the code is known."""
    found = grouped(reading.statements("observation", part.head))
    if _ASSERTION in part.head or any(code in reading.tables.questions for code in part.head):
        own = {id_: one for id_, one in found.items() if Code(systems.FINDINGS, id_) in part.head}
        if not own:
            _asserted(part, frame, reading)
            return True
        found = own
    for statement in _apart(found, part, frame, reading):
        _one(statement, part, frame, reading)
    return bool(found)


def _asserted(part: Part, frame: Frame, reading: Reading) -> None:
    """The finding is the value: what was asked is only whether something was found."""
    if part.holder.get("dataAbsentReason") is not None:
        return
    for statement in grouped(reading.statements("observation", part.value)).values():
        if known()[statement.id].kind != "quantity":
            state = State.PRESENT if statement.present else State.ABSENT
            _add(reading, frame, statement, state, _source(statement.id, part, frame, reading))


def _apart(found: dict[str, Statement], part: Part, frame: Frame, reading: Reading) -> list[Statement]:
    """One of two ids that share a code: by echo or by catheter, as the source says."""
    if _TWINS.isdisjoint(found):
        return list(found.values())
    source = _source("", part, frame, reading)
    kept = []
    for id_, statement in found.items():
        twin = _BY_ECHO.get(id_)
        if twin is None:
            if not any(_BY_ECHO.get(other) == id_ for other in found):
                kept.append(statement)
        elif source is Source.ECHO:
            kept.append(replace(statement, id=twin))
        elif twin in found and source is not Source.CATHETER:
            words = "The number could come from an echo or a catheter; name the method. It was left out."
            reading.log.add("information", "incomplete", "chart-method", words, part.place)
        else:
            kept.append(statement)
    return kept


def _source(id_: str, part: Part, frame: Frame, reading: Reading) -> Source:
    """The kind of document, by the first thing that tells it; the order is that of the table."""
    categories = codes(frame.found.resource.get("category"))
    prefix = (Code("", f"{id_.partition('.')[0]}."),)
    return (
        reading.source("Observation", "method", frame.methods)
        or reading.source("Observation", "code", (*part.head, *part.value))
        or (reading.source("Observation", "own-category", categories) if frame.ours else None)
        or (reading.source("Observation", "own-id", prefix) if frame.ours else None)
        or reading.source("Observation", "id", prefix)
        or reading.source("Observation", "category", categories)
        or Source.OTHER
    )


def _one(statement: Statement, part: Part, frame: Frame, reading: Reading) -> None:
    definition = known()[statement.id]
    source = _source(definition.id, part, frame, reading)
    if definition.id.startswith("catheter.") and source is Source.ECHO:
        words = "The method is an echo, and the code a catheter's; the number was left out."
        reading.log.add("warning", "business-rule", "chart-method", words, part.place)
        return
    described = _described(definition, part, frame, reading)
    described = tuple(dict.fromkeys((*statement.qualifiers, *described)))
    statement = replace(statement, qualifiers=described)
    if definition.kind == "quantity":
        _measured(statement, part, frame, reading, source)
    elif definition.kind == "choice" and not statement.answers:
        _chosen(statement, part, frame, reading, source)
    else:
        _signed(statement, part, frame, reading, source)


def _measured(statement: Statement, part: Part, frame: Frame, reading: Reading, source: Source) -> None:
    names = value_names(part.holder)
    if part.holder.get("dataAbsentReason") is not None or not names:
        return
    if len(names) > 1:
        words = "Several values stand at one place; none is used."
        reading.log.add("information", "not-supported", "chart-value", words, part.place)
        return
    definition = known()[statement.id]
    place = f"{part.place}.{names[0]}"
    found = measure(names[0], part.holder[names[0]], definition, reading.log, place)
    if found is None:
        return
    odd = implausible(found, definition)
    if odd:
        words = f"The number lies outside what is plausible for {definition.id}; kept, with less trust."
        reading.log.add("warning", "value", "chart-implausible", words, place)
    framed = replace(frame, low_trust=frame.low_trust or odd)
    _add(reading, framed, statement, State.PRESENT, source, found)


def _signed(statement: Statement, part: Part, frame: Frame, reading: Reading, source: Source) -> None:
    said = presence(part.holder, reading, part.place)
    if said is None:
        return
    narrower = [
        one
        for one in reading.statements("observation", said.value)
        if f"{one.id}.".startswith(f"{statement.id}.")
    ]
    if said.value and not narrower:
        words = "The value does not say present or absent in a way that is known here; it is not used."
        reading.log.add("information", "not-supported", "chart-value", words, part.place)
        return
    state = _state(statement, said.state, reading, part.place)
    if state is None:
        return
    for one in grouped(narrower).values() if narrower else (statement,):
        if one.present is statement.present:
            qualifiers = tuple(dict.fromkeys((*one.qualifiers, *statement.qualifiers, *said.qualifiers)))
            _add(reading, frame, replace(one, qualifiers=qualifiers), state, source)


def _state(statement: Statement, said: State, reading: Reading, place: str) -> State | None:
    """The state of what a code says, when the code was affirmed, denied or doubted."""
    if said is State.UNCERTAIN:
        return said
    if statement.contextual and said is State.ABSENT:
        words = "Denying a code that itself says absent or history is a double negative; it is not used."
        reading.log.add("warning", "business-rule", "chart-double-negative", words, place)
        return None
    if statement.answers and said is State.ABSENT:
        words = "That it is not this one does not say which one it is; it stays unknown."
        reading.log.add("information", "not-supported", "chart-answer", words, place)
        return None
    return said if statement.present else State.ABSENT


def _chosen(statement: Statement, part: Part, frame: Frame, reading: Reading, source: Source) -> None:
    table, log = reading.tables.values, reading.log
    found = [(code, one) for code in part.value for one in table.get((statement.id, code), ())]
    # our own code alone where there is one, for it says exactly what is meant
    own = [pair for pair in found if pair[0].system in (systems.QUALIFIERS, systems.FINDINGS)]
    said = [one for _, one in own or found]
    answers = tuple(dict.fromkeys(answer for one in said for answer in one.answers))
    if not answers:
        _unanswered(statement, part, frame, reading, source)
    elif len(answers) > 1:
        words = "The codes of one value mean different answers; none is used."
        log.add("warning", "business-rule", "chart-answer", words, part.place)
    elif presence(part.holder, reading, part.place) is not None:
        qualifiers = tuple(
            dict.fromkeys((*statement.qualifiers, *(q for one in said for q in one.qualifiers)))
        )
        chosen = replace(statement, answers=answers, qualifiers=qualifiers)
        _add(reading, frame, chosen, State.PRESENT, source)


def _unanswered(statement: Statement, part: Part, frame: Frame, reading: Reading, source: Source) -> None:
    """A choice without an answer: absent where that was said and means something, else unknown."""
    if part.value and not any(code in reading.tables.presence for code in part.value):
        words = f"No code of the value is an answer to {statement.id}; it stays unknown."
        reading.log.add("information", "code-invalid", "chart-answer", words, part.place)
        return
    said = presence(part.holder, reading, part.place)
    if said is not None and said.state is State.ABSENT and (frame.ours or source is Source.DEVICE):
        _add(reading, frame, statement, State.ABSENT, source)


def _described(definition: Known, part: Part, frame: Frame, reading: Reading) -> tuple[Qualifier, ...]:
    """Properties from bodySite, method and the components that are properties."""
    found = reading.qualifiers(definition, codes(part.holder.get("bodySite")), frame.methods)
    for component in part.components:
        value = codes(component.get("valueCodeableConcept"))
        for axis in _axes_of(component, reading):
            if axis in definition.qualifiers and component.get("dataAbsentReason") is None:
                found += _property(axis, value, reading)
    return tuple(dict.fromkeys(sorted(found, key=lambda q: (q.axis, q.value))))


def _property(axis: str, value: tuple[Code, ...], reading: Reading) -> list[Qualifier]:
    if axis == "grade":
        for code in value:
            parsed = _GRADE.fullmatch(code.code) if code.system == systems.QUALIFIERS else None
            if parsed:
                low, high, of = parsed.groups()
                return [Qualifier(axis, grade=Grade(int(low), int(high or low), int(of)))]
        return []
    named = (reading.tables.axis_values.get((axis, code)) for code in value)
    return [Qualifier(axis, one) for one in dict.fromkeys(named) if one is not None]


def _add(
    reading: Reading,
    frame: Frame,
    statement: Statement,
    state: State,
    source: Source,
    number: Measure | None = None,
) -> None:
    if not frame.time and source in _TIMED:
        words = "The chart does not say when this was true; it counts as old. Send effective[x]."
        reading.log.add("information", "incomplete", "chart-no-time", words, frame.found.place)
    reading.facts.append(
        Fact(
            statement.id,
            state,
            source,
            statement.answers,
            number,
            statement.qualifiers,
            frame.time,
            frame.encounter,
            frame.found.name,
            frame.low_trust,
        )
    )


_TIMED: Final = frozenset(Source) - {Source.DEMOGRAPHICS, Source.DEVICE, Source.PROCEDURE}
