"""What contradicts itself inside one examination, before anything is coded."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from datetime import UTC, datetime, timedelta
from typing import Final

from fhirgallop.exam.catalogue import Catalogue
from fhirgallop.exam.entry import Entry
from fhirgallop.exam.exam import Exam
from fhirgallop.exam.moment import Moment
from fhirgallop.exam.presence import Presence
from fhirgallop.outcome import Issue, Severity


def check(exam: Exam, catalogue: Catalogue) -> list[Issue]:
    """Every contradiction and implausible value inside `exam`; nothing is changed."""
    return [issue for clause in CLAUSES for issue in clause(exam, catalogue)]


def check_against_clock(exam: Exam, now: datetime) -> list[Issue]:
    """What cannot be true at the moment `now` (with a zone), at which the examination is converted.

    A day is granted: clocks go wrong, and a date without a time of day names no zone.
    """
    latest = Moment((now.astimezone(UTC) + timedelta(days=1)).isoformat())
    if not Moment(exam.time.end or exam.time.start).after(latest):
        return []
    text = "The examination is dated in the future; it is kept as entered. Check its day, month and year."
    return [_issue("warning", "exam-in-the-future", text, code="value")]


def _issue(severity: Severity, rule: str, text: str, *entries: Entry, code: str = "business-rule") -> Issue:
    fields = dict.fromkeys(field for entry in entries for field in entry.fields)
    return Issue(severity, code, rule, text, field=", ".join(fields))


def nothing_entered(exam: Exam, _catalogue: Catalogue) -> Iterator[Issue]:
    """An examination in which nothing was recorded."""
    if not exam.entries:
        text = "No finding is recorded in this examination; only an empty report is written."
        yield _issue("warning", "exam-without-entries", text)


def before_all_records(exam: Exam, catalogue: Catalogue) -> Iterator[Issue]:
    """A year such as 1026, or 0206, in which no patient of today was examined."""
    cure = "the year is mistyped. Correct it."
    if any(moment and moment < _EARLIEST for moment in (exam.time.start, exam.time.end)):
        text = f"The examination is dated before {_EARLIEST}; {cure}"
        yield _issue("error", "exam-before-1900", text, code="value")
    for entry in exam.entries:
        if entry.time and entry.time < _EARLIEST:
            text = f"{catalogue.findings[entry.finding].label} is dated before {_EARLIEST}; {cure}"
            yield _issue("error", "exam-before-1900", text, entry, code="value")


def present_and_absent(exam: Exam, catalogue: Catalogue) -> Iterator[Issue]:
    """One finding, same instance, entered as present and as absent."""
    first: dict[tuple[str, str], Entry] = {}
    for entry in exam.entries:
        if entry.withdrawn:
            continue
        other = first.setdefault(entry.key, entry)
        if other is entry:
            continue
        label = catalogue.findings[entry.finding].label
        if other.presence != entry.presence:
            text = (
                f"{label} is entered as {other.presence} and as {entry.presence}; keep the one that is true."
            )
            yield _issue("error", "exam-present-and-absent", text, other, entry)
        elif other.answers != entry.answers or other.measure != entry.measure:
            text = f"{label} is entered twice with different values; keep one, or map them as two instances."
            yield _issue("error", "exam-entered-twice", text, other, entry)


def kind_present_parent_absent(exam: Exam, catalogue: Catalogue) -> Iterator[Issue]:
    """A systolic murmur present while 'murmur' as such is absent."""
    absent = {entry.finding: entry for entry in exam.entries if entry.presence is Presence.ABSENT}
    for entry in exam.entries:
        definition = catalogue.findings[entry.finding]
        whole = absent.get(definition.parent)
        if whole and entry.presence is Presence.PRESENT and definition.kind == "sign":
            text = (
                f"{definition.label} is present, but {catalogue.findings[whole.finding].label} as a whole is "
                "absent; one of the two needs another look."
            )
            yield _issue("error", "exam-kind-present-whole-absent", text, whole, entry)


def qualified_but_not_present(exam: Exam, catalogue: Catalogue) -> Iterator[Issue]:
    """A grade or a quality on a finding that is absent, or that nobody could have heard."""
    for entry in exam.entries:
        if entry.presence in _WITHOUT_DESCRIPTION and not entry.withdrawn:
            describing = sorted(
                {q.axis for q in entry.qualifiers if q.axis not in ALSO_OF_ABSENT}
                | ({"number"} if entry.measure else set())
            )
            if describing:
                label = catalogue.findings[entry.finding].label
                said = _WITHOUT_DESCRIPTION[entry.presence]
                text = f"{label} {said} but described ({', '.join(describing)}); keep the one that is true."
                yield _issue("error", "exam-absent-but-described", text, entry)


def grade_out_of_range(exam: Exam, catalogue: Catalogue) -> Iterator[Issue]:
    """Grade 7 of 6."""
    for entry in exam.entries:
        for qualifier in entry.qualifiers:
            grade = qualifier.grade
            if grade and not 1 <= grade.low <= grade.high <= grade.of:
                label = catalogue.findings[entry.finding].label
                text = (
                    f"{label}: a grade must lie between 1 and {grade.of}, low before high; correct the grade."
                )
                yield _issue("error", "exam-grade-range", text, entry, code="value")


def qualifier_does_not_fit(exam: Exam, catalogue: Catalogue) -> Iterator[Issue]:
    """A qualifier on a finding that it cannot describe."""
    for entry in exam.entries:
        definition = catalogue.findings[entry.finding]
        for axis in sorted({q.axis for q in entry.qualifiers} - definition.qualifiers):
            text = f"{definition.label} has no {axis}; map that field to another finding."
            yield _issue("error", "exam-qualifier-does-not-fit", text, entry)


def diastolic_above_systolic(exam: Exam, _catalogue: Catalogue) -> Iterator[Issue]:
    """A diastolic pressure that is not below its systolic one."""
    systolic = {e.instance: e for e in exam.entries if e.finding == "pressure.systolic" and e.measure}
    for entry in exam.entries:
        pair = systolic.get(entry.instance)
        if entry.finding != "pressure.diastolic" or entry.measure is None or pair is None:
            continue
        if pair.measure is not None and entry.measure.value >= pair.measure.value:
            text = "The diastolic pressure is not below the systolic one; the two may have changed places."
            yield _issue("error", "exam-diastolic-above-systolic", text, pair, entry, code="value")


def vital_sign_without_its_number(exam: Exam, catalogue: Catalogue) -> Iterator[Issue]:
    """A range, or a bare present or absent, where the core vital-sign profile takes one number."""
    for entry in exam.entries:
        definition, measure = catalogue.findings[entry.finding], entry.measure
        if definition.category != "vital-signs" or definition.kind != "quantity":
            continue
        if measure.high is not None if measure else entry.presence.looked_for:
            text = f"{definition.label} is a vital sign: enter one number, or say that it was not examined."
            yield _issue("error", "exam-vital-sign-number", text, entry, code="value")


def implausible_value(exam: Exam, catalogue: Catalogue) -> Iterator[Issue]:
    """A number outside what is plausible: kept as entered, and flagged; refused where it cannot be at all."""
    for entry in exam.entries:
        definition, measure = catalogue.findings[entry.finding], entry.measure
        if measure is None:
            continue
        lowest, highest = measure.value, measure.high if measure.high is not None else measure.value
        if lowest > highest:
            yield _issue(
                "error", "exam-range-reversed", f"{definition.label}: the range ends below its start.", entry
            )
        elif definition.low is not None and lowest < 0 <= definition.low:
            text = f"{definition.label} cannot be below zero; mend the number, or leave the box blank."
            yield _issue("error", "exam-impossible-value", text, entry, code="value")
        elif (definition.low is not None and lowest < definition.low) or (
            definition.high is not None and highest > definition.high
        ):
            text = (
                f"{definition.label} lies outside {definition.low} to {definition.high} {definition.unit}; "
                "it is kept as entered. Check the number and its unit."
            )
            yield _issue("warning", "exam-implausible-value", text, entry, code="value")


CLAUSES: Final[tuple[Callable[[Exam, Catalogue], Iterator[Issue]], ...]] = (
    nothing_entered,
    before_all_records,
    present_and_absent,
    kind_present_parent_absent,
    qualified_but_not_present,
    grade_out_of_range,
    qualifier_does_not_fit,
    diastolic_above_systolic,
    vital_sign_without_its_number,
    implausible_value,
)

# Year, as a FHIR dateTime begins.
_EARLIEST: Final = "1900"
_WITHOUT_DESCRIPTION: Final = {
    Presence.ABSENT: "is absent",
    Presence.NOT_EXAMINED: "was not examined",
    Presence.NOT_EXAMINABLE: "could not be examined",
}
# Where and how one looked is true of an absent finding too; how it sounded is not.
ALSO_OF_ABSENT: Final = frozenset(
    {"site", "side", "posture", "respiratory-phase", "method", "chamber", "exertion", "cuff-size"}
)
