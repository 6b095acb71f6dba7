"""What a box says besides its values: its own time, remarks, method, site and examiner."""

from __future__ import annotations

from fhirgallop.intake.record import Field
from fhirgallop.mapping.record_reading import RecordReader
from fhirgallop.mapping.run import Run


def own_time(run: Run, field: Field, record: RecordReader) -> str:
    """The box's own time where it differs from the examination's."""
    if not field.time.strip():
        return ""
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
