"""Reads whose examination a record is, which one, when, and how far it has got."""

from __future__ import annotations

import re
from collections.abc import Sequence
from typing import Final

from fhirgallop.exam.exam import ExamStatus, Party
from fhirgallop.exam.moment import Moment
from fhirgallop.mapping.run import Run
from fhirgallop.mapping.template_map import PartySource, RecordPart
from fhirgallop.mapping.times import WrittenTime, single
from fhirgallop.mapping.wordings import Blanks, Lookup

# FHIR R4 data type id; business numbers are bounded by us.
_FHIR_ID: Final = re.compile(r"[A-Za-z0-9.-]{1,64}", re.ASCII)
_REFERENCE: Final = re.compile(
    r"(?:Patient|Encounter|Practitioner|PractitionerRole)/([A-Za-z0-9.-]{1,64})", re.ASCII
)
_UNUSABLE: Final = re.compile("[\x00-\x1f\x7f-\x9f\ud800-\udfff\ufffe\uffff]")
_LONGEST: Final = 255
_RANKED: Final[tuple[ExamStatus, ...]] = ("preliminary", "corrected", "amended")


class RecordReader:
    """The record part of one map, ready to be applied."""

    def __init__(self, part: RecordPart, blanks: Blanks) -> None:
        self._part = part
        self._blanks = blanks
        self._time = WrittenTime(part.time)
        self._periods = Lookup(part.time.periods)
        self._statuses = Lookup(part.status.choice) if part.status else None

    @property
    def zone(self) -> str:
        """Zone of times that are written without one."""
        return self._time.zone

    def patient(self, run: Run) -> Party | None:
        """The patient; an issue where there is none."""
        source = self._part.patient
        party = self._party(run, source, run.record.header.patient)
        if party is None and not any(issue.rule == "map-number-of-record" for issue in run.issues):
            self._missing(run, "map-patient-missing", "patient", [source.field])
        return party

    def encounter(self, run: Run) -> Party | None:
        """The encounter, where one is named."""
        return self._optional(run, self._part.encounter, run.record.header.encounter, "encounter")

    def examiner(self, run: Run) -> Party | None:
        """The examiner, where one is named."""
        return self._optional(run, self._part.examiner, run.record.header.examiner, "examiner")

    def identifier(self, run: Run) -> str:
        """The examination's number; empty, with an issue, where it cannot be told."""
        fields = self._part.identifier.fields
        found = [single(run, self._blanks, name) for name in fields]
        number = "-".join(found) if fields and all(found) else run.record.header.identifier.strip()
        if not number:
            self._missing(run, "map-identifier-missing", "number of its own", fields)
            return ""
        return number if self._usable(run, number, fields[0] if fields else "") else ""

    def time(self, run: Run) -> Moment | None:
        """When it took place; None, with an issue, where that cannot be told."""
        source = self._part.time
        if source.constant:
            return source.constant
        name = source.fields[0] if source.fields else ""
        if source.periods and (values := self._blanks.filled(run.fields.get(name))):
            span = self._periods.find(values[0])
            if span is None:
                words = (
                    "This wording stands for none of the periods of the map. Correct the "
                    "record, or add it below periods."
                )
                run.unknown_value("error", words, name, values[0])
            return span
        found = [single(run, self._blanks, field) for field in source.fields]
        if found and all(found):
            return self._time.moment(run, " ".join(found), name)
        written = run.record.header.time.strip()
        if not written:
            self._missing(run, "map-time-missing", "time", source.fields)
            return None
        return self.moment(run, written, name)

    def moment(self, run: Run, written: str, name: str) -> Moment | None:
        """The ISO 8601 moment of a header or a mark; None, with an issue, where it cannot be read."""
        return self._time.moment(run, written, name, as_stated=False)

    def status(self, run: Run) -> ExamStatus:
        """The examination's status, never further than that of its least finished entry."""
        status = self._stated(run)
        if run.record.form != "oru" or status not in ("final", "corrected", "amended"):
            return status
        for lower in _RANKED:
            name = next((f.name for f in run.fields.values() if f.status == lower), "")
            if name and status != lower:
                words = f"This entry is sent as {lower}, so the whole examination counts as {lower}."
                run.issue("information", "informational", "map-entry-status", words, name)
                return lower
        return status

    def _stated(self, run: Run) -> ExamStatus:
        source, header = self._part.status, run.record.header.status
        if source and self._statuses:
            values = self._blanks.filled(run.fields.get(source.field))
            if values:
                status = self._statuses.find(values[0])
                if status is None:
                    words = (
                        "This wording of the status is not among those that line "
                        f"{source.line} of the map knows."
                    )
                    run.unknown_value(
                        "error",
                        f"{words} Correct the record, or add the wording to the map.",
                        source.field,
                        values[0],
                    )
                return status or "preliminary"
            if not header:
                words = "The status is blank, so the examination counts as preliminary. Fill it in."
                run.issue("warning", "incomplete", "map-status-blank", words, source.field)
                return "preliminary"
        if header in ("cancelled", "not-asked"):
            words = "The form says that this examination did not take place; there is nothing to code."
            run.issue("error", "business-rule", "map-exam-cancelled", words, source.field if source else "")
            return "final"
        return header or "final"  # type: ignore[return-value]

    def _optional(self, run: Run, source: PartySource | None, header: str, what: str) -> Party | None:
        if source:
            return self._party(run, source, header)
        if header:
            words = (
                f"The form names an {what}, but the map has no record.{what}; add it to the map to keep it."
            )
            run.issue("information", "informational", "map-header-unread", words, "")
        return None

    def _party(self, run: Run, source: PartySource, header: str) -> Party | None:
        value = single(run, self._blanks, source.field) if source.field else ""
        if not value:
            header = header.strip()
            if reference := _REFERENCE.fullmatch(header):
                return Party(reference[1], is_fhir_id=True)
            value = header
        if not value:
            return None
        if source.is_fhir_id and not _FHIR_ID.fullmatch(value):
            words = (
                "This is not a FHIR id (1 to 64 letters, digits, hyphens, points); correct "
                "it, or give the map a system."
            )
            run.issue("error", "value", "map-number-of-record", words, source.field)
            return None
        return (
            Party(value, source.system, source.is_fhir_id) if self._usable(run, value, source.field) else None
        )

    def _usable(self, run: Run, value: str, name: str) -> bool:
        if len(value) <= _LONGEST and not _UNUSABLE.search(value):
            return True
        words = f"The number is longer than {_LONGEST} letters, or holds control characters; correct it."
        run.issue("error", "value", "map-number-of-record", words, name)
        return False

    def _missing(self, run: Run, rule: str, what: str, fields: Sequence[str]) -> None:
        name = next(filter(None, fields), "")
        where = "The field is absent or blank" if name else "The form's header does not say it"
        words = f"The examination has no {what}. {where}; fill it in, or name the right field in the map."
        run.issue("error", "required", rule, words, name)
