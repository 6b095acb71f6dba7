"""What a box says besides its values: its own time, remarks, method, site and examiner."""

from __future__ import annotations

from fhirgallop.intake.record import Field
from fhirgallop.mapping.record_reading import RecordReader
from fhirgallop.mapping.run import Run, is_plain
from fhirgallop.mapping.template_map import TimeSource
from fhirgallop.mapping.times import WrittenTime, single
from fhirgallop.mapping.wordings import Blanks


def own_time(run: Run, field: Field, record: RecordReader, named: str = "") -> str:
    """The time of a box where it differs from the examination's: `named` by its line, or the box's own."""
    if named and field.time.strip():
        words = (
            "This box brings a time of its own beside the one that its line names; the one that the line "
            "names was used. Name only one."
        )
        run.issue("information", "informational", "map-time-unread", words, field.name)
    if named or not field.time.strip():
        return named
    moment = record.moment(run, field.time, field.name)
    return "" if moment is None or moment == run.moment else moment.start


def own_notes(run: Run, field: Field) -> list[str]:
    """Remarks of the box, once in the whole examination; method and site travel in words."""
    if field.name in run.noted:
        return []
    run.noted.add(field.name)
    notes = [note for note in field.notes if note.strip()]
    if field.method.strip():
        notes.append(f"Method as sent: {field.method.strip()}")
    if field.site.strip():
        notes.append(f"Body site as sent: {field.site.strip()}")
    if field.performer.strip() and field.performer.strip() != run.record.header.examiner:
        words = (
            "This entry names an examiner of its own, which was not kept; name the examiner "
            "of the examination."
        )
        run.issue("information", "informational", "map-performer-unread", words, field.name)
    return notes


class LineTime:
    """The time that a line names for what its box says."""

    def __init__(self, source: TimeSource, blanks: Blanks, zone: str) -> None:
        self._fields = source.fields
        self._written = WrittenTime(source, zone)
        self._blanks = blanks
        # Several lines that name the same time read it once.
        self._key = (*source.fields, source.format, self._written.zone)

    def read(self, run: Run) -> str:
        """FHIR dateTime; empty where it is blank, unreadable (with an issue), or the examination's own."""
        if self._key not in run.times:
            run.settled.update(self._fields)
            run.times[self._key] = self._read(run)
        return run.times[self._key]

    def _read(self, run: Run) -> str:
        filled = [text for name in self._fields if (text := self._text(run, name))]
        if not filled:
            return ""
        name = self._fields[0]
        moment = self._written.moment(run, " ".join(filled), name)
        if moment is None or moment == run.moment:
            return ""
        if run.moment and moment.after(run.moment):
            words = (
                "This time is later than that of the examination, and is kept as written. Correct the one "
                "that is wrong."
            )
            run.issue("warning", "business-rule", "map-time-after-exam", words, name)
        return moment.start

    def _text(self, run: Run, name: str) -> str:
        field = run.fields.get(name)
        if field is None or not self._blanks.filled(field):
            return ""
        if not is_plain(field):
            run.notes += own_notes(run, field)
        if field.status in ("entered-in-error", "cancelled", "not-asked"):
            words = f"This time is marked as {field.status} by the sender and was left out."
            run.issue("information", "informational", "map-detail-withdrawn", words, name)
            return ""
        return single(run, self._blanks, name)
