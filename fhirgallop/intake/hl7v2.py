"""HL7 v2 ORU^R01: each OBR group is one examination, each OBX one field named by OBX-3.1.

Sources: HL7 v2.8.2 chapters 2, 3 (PID, PV1), 4 (OBR) and 7 (ORU, OBX); HL7 v2-to-FHIR guide, message map
ORU_R01, segment map OBX[Observation], maps of tables 0085 (OBX-11) and 0123 (OBR-25), read 2026-12.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import BinaryIO, Final

from fhirgallop.intake import hl7_values
from fhirgallop.intake.hl7_syntax import Message, Segment, parse
from fhirgallop.intake.limits import DEFAULT, Limits
from fhirgallop.intake.lines import numbered
from fhirgallop.intake.midway import START, Midway
from fhirgallop.intake.reading import Read, Reading, refused
from fhirgallop.intake.record import Field, Header, LocalRecord, Status, Value
from fhirgallop.outcome import Issue, Severity, has_errors

ENTRY_STATUS: Final[Mapping[str, Status]] = {
    "F": "final",
    "P": "preliminary",
    "C": "corrected",
    "A": "amended",
    "D": "entered-in-error",
    "W": "entered-in-error",
    "X": "cancelled",
    "N": "not-asked",
}
"""OBX-11 (table 0085) with a counterpart; B, I, O, R, S, U and V have none in the guide."""

REPORT_STATUS: Final[Mapping[str, Status]] = {
    "F": "final",
    "P": "preliminary",
    "R": "preliminary",
    "C": "corrected",
    "X": "cancelled",
}
"""OBR-25 (table 0123) with a counterpart; R, a partial report, is preliminary for its entries."""

_NO_COUNTERPART: Final = frozenset("BIORSUV")
_NO_REPORT_COUNTERPART: Final = frozenset("OISAMN")
_READ_OBX: Final = frozenset((1, 2, 3, 4, 5, 6, 11, 14, 16, 17, 20))
_WITHOUT_CONTENT: Final = frozenset(("MSH", "SFT", "UAC", "EVN", "PID", "PV1", "OBR", "OBX", "NTE"))
_FRAMING: Final = b"\x0b\x1c"
_BATCH: Final = (b"FHS", b"BHS", b"BTS", b"FTS")


def read_message(data: bytes | str, *, line: int = 1, source: str = "", limits: Limits = DEFAULT) -> Reading:
    """The examinations of one message, one for each OBR.

    Args:
        data: the message; segments may end in CR, LF or CRLF, and the frame of MLLP may be around it.
        line: line of the source on which it starts.
        source: file name, for issues.
        limits: bounds.
    """
    message, issues = parse(data, line=line, source=source, limits=limits)
    if message is None:
        return Reading(issues=tuple(issues))
    notes = _Notes(source, issues, line)
    kind = message.components(message.segments[0].field(9))
    if [part.upper() for part in kind[:2]] != ["ORU", "R01"]:
        notes.add(
            "error", "not-supported", "hl7-message-type", "MSH-9 is not ORU^R01; send results as ORU^R01."
        )
    groups = _groups(message, notes)
    if not groups:
        notes.add(
            "error", "required", "hl7-no-obr", "The message has no OBR segment; send one above its OBX."
        )
    if has_errors(issues):
        return Reading(issues=tuple(issues))
    records = [_record(message, group, place, source) for place, group in enumerate(groups, start=1)]
    first = replace(records[0], issues=(*issues, *records[0].issues))
    return Reading((first, *records[1:]))


def read_hl7(
    stream: BinaryIO, *, source: str = "", limits: Limits = DEFAULT, since: Midway = START
) -> Iterator[Read]:
    """Every message of a file or a batch (FHS/BHS ... BTS/FTS); a bad one is rejected, the next is read.

    `since` is the place in the file that the stream starts at.
    """
    count = since.count
    for line, data in _messages(stream, limits, since.line):
        if data[:3] in _BATCH:
            if data.startswith(b"BTS") and not _agrees(data, count):
                text = f"BTS-1 does not agree with the {count:,} messages read; send the whole batch again."
                yield refused(source, line, "warning", "hl7-batch-count", text)
            continue
        count += 1
        if count > limits.rows:
            text = f"The file has more than {limits.rows:,} messages; send it in parts."
            yield refused(source, line, "fatal", "file-too-many-rows", text)
            return
        if len(data) > limits.record_bytes:
            text = f"The message is larger than {limits.record_bytes:,} bytes; send it in parts."
            yield refused(source, line, "error", "hl7-too-large", text)
        else:
            yield from read_message(data, line=line, source=source, limits=limits).stream(source)
    if not count:
        yield refused(source, 0, "error", "hl7-no-msh", "The file holds no MSH segment; send whole messages.")


def opens_message(line: bytes) -> bool:
    """Whether a line is the first of a message."""
    return line.lstrip(_FRAMING).startswith(b"MSH")


def _agrees(trailer: bytes, count: int) -> bool:
    """Whether BTS-1, where it states a number, is the number of messages."""
    stated = [*trailer.split(trailer[3:4] or b"|"), b""][1].strip()
    return not (stated.isdigit() and len(stated) < 10) or int(stated) == count


def _messages(stream: BinaryIO, limits: Limits, first: int) -> Iterator[tuple[int, bytes]]:
    """Each message, and each line of a batch's frame, with its first line.

    One that is too large comes cut, and still longer than it may be.
    """
    start, parts, size = 0, list[bytes](), 0
    for number, line in numbered(stream, limits.record_bytes, first):
        content = b" " * (limits.record_bytes + 1) if line is None else line.lstrip(_FRAMING)
        opens, frame = content.startswith(b"MSH"), content[:3] in _BATCH
        if (opens or frame) and parts:
            yield start, b"".join(parts)
            parts, size = [], 0
        if frame:
            yield number, content
        elif parts or content.strip():
            start = start if parts else number
            if size <= limits.record_bytes:
                parts.append(content)
            size += len(content)
    if parts:
        yield start, b"".join(parts)


class _Notes:
    """Gathers issues of one message or record."""

    def __init__(self, source: str, issues: list[Issue], line: int) -> None:
        self.issues = issues
        self._source = source
        self._line = line

    def add(
        self, severity: Severity, code: str, rule: str, text: str, field: str = "", line: int = 0
    ) -> None:
        """One more issue, at the line where the message or its OBR starts if at no other."""
        at = line or self._line
        self.issues.append(Issue(severity, code, rule, text, field=field, source=self._source, line=at))


@dataclass(slots=True)
class _Group:
    """An OBR with what belongs to it."""

    patient: Segment | None
    visit: Segment | None
    order: Segment
    notes: list[Segment]
    entries: list[tuple[Segment, list[Segment]]]


def _groups(message: Message, notes: _Notes) -> list[_Group]:
    """The OBR groups of a message; what belongs to none of them is said."""
    patient = visit = None
    groups: list[_Group] = []
    unread: Counter[str] = Counter()
    for segment in message.segments:
        match segment.name:
            case "PID":
                patient, visit = segment, None
            case "PV1":
                visit = segment
            case "OBR":
                groups.append(_Group(patient, visit, segment, [], []))
            case "OBX" if groups:
                groups[-1].entries.append((segment, []))
            case "OBX":
                text = "This OBX stands above the first OBR; each OBX belongs under an OBR."
                notes.add("error", "structure", "hl7-no-obr", text, line=segment.line)
            case "NTE" if groups:
                last = groups[-1].entries[-1][1] if groups[-1].entries else groups[-1].notes
                last.append(segment)
            case "NTE":
                unread["NTE above the first OBR"] += 1
            case name if name not in _WITHOUT_CONTENT:
                unread[name] += 1
    if unread:
        names = ", ".join(f"{name} ({count})" for name, count in list(unread.items())[:20])
        text = f"Segments that are not read: {names}. Move what belongs to the examination into OBX segments."
        notes.add("information", "informational", "hl7-segment-not-read", text)
    return groups


def _record(message: Message, group: _Group, place: int, source: str) -> LocalRecord:
    notes = _Notes(source, [], group.order.line)
    fields = _fields(message, group, notes)
    header = _header(message, group, place, fields.values(), notes)
    if group.notes:
        fields.setdefault("NTE", Field("NTE", _remarks(message, group.notes), group.notes[0].line))
    if not group.entries:
        notes.add(
            "warning", "not-found", "hl7-no-obx", "This OBR has no OBX below it.", line=group.order.line
        )
    return LocalRecord("oru", fields, header, source, group.order.line, tuple(notes.issues))


def _header(message: Message, group: _Group, place: int, fields: Iterable[Field], notes: _Notes) -> Header:
    order = group.order
    patient = group.patient.field(3) if group.patient else ""
    if len(message.repetitions(patient)) > 1:
        text = "PID-3 holds several identifiers; the first is read. Put the one of this clinic first."
        notes.add("information", "informational", "hl7-several-patient-identifiers", text, line=order.line)
    written = message.component(order.field(7))
    time = hl7_values.iso_time(written) if written else ""
    if time is None:
        text = "OBR-7 is not of the form YYYYMMDDHHMMSS+ZZZZ; correct the time of the examination."
        notes.add("error", "value", "hl7-bad-time", text, "OBR-7", order.line)
    identifier = message.component(order.field(3)) or message.component(order.field(2))
    if not identifier and (control := message.component(message.segments[0].field(10))):
        identifier = control if place == 1 else f"{control}/{place}"
    # OBR-32 is a person (NDL) whose identifier is the first sub-component
    examiner = message.subcomponent(order.field(32))
    performers = {field.performer for field in fields if field.performer}
    if not examiner and len(performers) == 1:
        examiner = performers.pop()
    return Header(
        patient=message.component(patient),
        encounter=message.component(group.visit.field(19)) if group.visit else "",
        time=time or "",
        examiner=examiner,
        identifier=identifier,
        status=_report_status(message.component(order.field(25)), fields, order.line, notes),
    )


def _report_status(code: str, fields: Iterable[Field], line: int, notes: _Notes) -> Status:
    def note(severity: Severity, issue_type: str, rule: str, text: str) -> None:
        notes.add(severity, issue_type, rule, text, "OBR-25", line)

    status = REPORT_STATUS.get(code)
    if not code:
        note(
            "error",
            "required",
            "hl7-report-status-missing",
            "OBR-25 is empty; send the status of the results.",
        )
        return ""
    if status is None and code in _NO_REPORT_COUNTERPART:
        text = f"OBR-25 is {code}, which has no counterpart in FHIR; the examination is taken as preliminary."
        note("warning", "not-supported", "hl7-report-status-without-counterpart", text)
        return "preliminary"
    if status is None:
        text = "OBR-25 is no status that results can have (F, P, C, R, X ...); correct it."
        note("error", "code-invalid", "hl7-report-status-unknown", text)
        return ""
    if status in ("final", "corrected") and any(field.status == "preliminary" for field in fields):
        text = "OBR-25 says final and an OBX-11 says preliminary; the examination is taken as preliminary."
        note("warning", "business-rule", "hl7-status-disagrees", text)
        return "preliminary"
    return status


def _fields(message: Message, group: _Group, notes: _Notes) -> dict[str, Field]:
    """The entries of a group by name; several OBX of one name and circumstances are values of one field."""
    subs: dict[str, set[str]] = {}
    named = []
    for segment, remarks in group.entries:
        identifier, sub = _identifier(message, segment), message.component(segment.field(4))
        if not identifier:
            text = "OBX-3 is empty, so that the entry has no name; send its identifier in OBX-3.1."
            notes.add("error", "required", "hl7-no-identifier", text, "OBX-3", segment.line)
            continue
        subs.setdefault(identifier, set()).add(sub)
        named.append((identifier, sub, segment, remarks))
    fields: dict[str, Field] = {}
    skipped: Counter[int] = Counter()
    for identifier, sub, segment, remarks in named:
        name = f"{identifier}/{sub}" if sub and len(subs[identifier]) > 1 else identifier
        skipped.update(n for n, raw in enumerate(segment.fields) if n and raw and n not in _READ_OBX)
        field = _field(message, name, segment, remarks, notes)
        if field is not None:
            _add(fields, field, notes)
    if skipped:
        listed = ", ".join(f"OBX-{number} ({count})" for number, count in sorted(skipped.items()))
        text = f"Parts of OBX that are not read: {listed}."
        notes.add("information", "informational", "hl7-field-not-read", text, line=group.order.line)
    return fields


def _identifier(message: Message, segment: Segment) -> str:
    parts = message.components(segment.field(3))
    return next((part.strip() for part in (*parts[0:1], *parts[3:4], *parts[1:2]) if part.strip()), "")


def _add(fields: dict[str, Field], new: Field, notes: _Notes) -> None:
    old = fields.get(new.name)
    if old is None:
        fields[new.name] = new
    elif replace(old, values=(), notes=(), line=0) == replace(new, values=(), notes=(), line=0):
        fields[new.name] = replace(old, values=(*old.values, *new.values), notes=(*old.notes, *new.notes))
    else:
        number = 1
        while f"{new.name}[{number}]" in fields:
            number += 1
        name = f"{new.name}[{number}]"
        text = (
            f"This OBX comes again under other circumstances and is read as {name}; tell them apart in OBX-4."
        )
        notes.add("warning", "duplicate", "hl7-repeated-identifier", text, new.name, new.line)
        fields[name] = replace(new, name=name)


def _field(
    message: Message, name: str, segment: Segment, remarks: Sequence[Segment], notes: _Notes
) -> Field | None:
    values = _values(message, name, segment, notes)
    if values is None:
        return None
    written = message.component(segment.field(14))
    time = hl7_values.iso_time(written) if written else ""
    if time is None:
        text = "OBX-14 is not of the form YYYYMMDDHHMMSS+ZZZZ; correct the time of the entry."
        notes.add("error", "value", "hl7-bad-time", text, name, segment.line)
    return Field(
        name,
        values,
        segment.line,
        status=_entry_status(message.component(segment.field(11)), name, segment.line, notes),
        time=time or "",
        notes=tuple(str(remark) for remark in _remarks(message, remarks)),
        method=_wording(message, segment.field(17)),
        site=_wording(message, segment.field(20)),
        performer=message.component(segment.field(16)),
    )


def _values(message: Message, name: str, segment: Segment, notes: _Notes) -> tuple[Value, ...] | None:
    """The values of OBX-5; None when the entry cannot be taken along."""
    raw, value_type = segment.field(5), message.component(segment.field(2)).upper()
    read = hl7_values.reader(value_type)
    if read is None:
        if not raw and not value_type:
            return ()
        if value_type in hl7_values.NOT_CARRIED:
            text = f"Values of type {value_type} (files, persons, waveforms) are not read; it is left out."
            notes.add("warning", "not-supported", "hl7-value-type-not-read", text, name, segment.line)
        else:
            text = (
                "OBX-2 names no value type that results can have (NM, SN, CWE, ST, TX, DTM ...); correct it."
            )
            notes.add("error", "code-invalid", "hl7-unknown-value-type", text, name, segment.line)
        return None
    unit = message.component(segment.field(6)) or message.component(segment.field(6), 2)
    values: list[Value] = []
    for repetition in message.repetitions(raw):
        value, fault = read(repetition, unit, message)
        if fault:
            notes.add("warning", "value", fault.rule, fault.text, name, segment.line)
        if value is not None and value != "":
            values.append(value)
    return tuple(values)


def _entry_status(code: str, name: str, line: int, notes: _Notes) -> Status:
    if code in ENTRY_STATUS:
        return ENTRY_STATUS[code]
    if code in _NO_COUNTERPART and len(code) == 1:
        text = f"OBX-11 is {code}, which has no counterpart in FHIR; the entry is taken as preliminary."
        notes.add("warning", "not-supported", "hl7-entry-status-without-counterpart", text, name, line)
    else:
        text = (
            "OBX-11 is empty or unknown; the entry is taken as preliminary. Send its status, such as F or P."
        )
        notes.add("warning", "code-invalid", "hl7-entry-status-unknown", text, name, line)
    return "preliminary"


def _wording(message: Message, raw: str) -> str:
    """Code of the first repetition, else its text."""
    return message.component(raw) or message.component(raw, 2)


def _remarks(message: Message, segments: Iterable[Segment]) -> tuple[str, ...]:
    """The words of NTE segments, each repetition a line."""
    texts = (
        "\n".join(message.text(part) for part in message.repetitions(segment.field(3))).strip()
        for segment in segments
    )
    return tuple(text for text in texts if text)
