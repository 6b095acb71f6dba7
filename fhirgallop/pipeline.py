"""The way of the data on one page: record -> exam -> coded Bundle, judged before it leaves.

Pure: no I/O, and no clock but the one handed in. The service, the command line and worker processes all call
`process`.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from datetime import datetime
from typing import Any

from fhirgallop.conformance.validator import validate
from fhirgallop.exam import catalogue, checks
from fhirgallop.exam.exam import Exam
from fhirgallop.intake.record import LocalRecord
from fhirgallop.mapping.apply import UnknownValue, apply
from fhirgallop.mapping.template_map import TemplateMap
from fhirgallop.observations.bundle import encode
from fhirgallop.observations.editions import Edition
from fhirgallop.observations.revision import draft_after_signed
from fhirgallop.outcome import Issue, has_errors, ordered


@dataclass(frozen=True, slots=True)
class Result:
    """What became of one record.

    Attributes:
        exam: what the clinician meant; None when the record cannot be read as an examination.
        bundle: the transaction Bundle; None when an issue is an error, for then nothing is sent.
        issues: everything noticed on the way, most severe first; never with a patient's data in the text.
        unread: fields that no line of the map reads.
        unknown: values that no line of the map knows, for the sender's own eyes.
    """

    exam: Exam | None
    bundle: dict[str, Any] | None
    issues: tuple[Issue, ...]
    unread: tuple[str, ...] = ()
    unknown: tuple[UnknownValue, ...] = ()

    @property
    def ok(self) -> bool:
        """True when there is a Bundle to send."""
        return self.bundle is not None


def process(
    record: LocalRecord,
    template_map: TemplateMap,
    *,
    recorded: datetime,
    edition: Edition = "R4",
    snomed: bool = True,
    earlier: dict[str, Any] | None = None,
) -> Result:
    """One record through every stage.

    Args:
        record: as an intake reader gave it.
        template_map: the clinic's map, already checked.
        recorded: the moment of conversion, with a zone.
        edition: FHIR edition to write.
        snomed: write SNOMED CT codings.
        earlier: the Bundle that this examination gave before, when it is sent again.
    """
    meant = understand(record, template_map, recorded)
    return finish(meant, record.form, recorded=recorded, edition=edition, snomed=snomed, earlier=earlier)


def understand(record: LocalRecord, template_map: TemplateMap, recorded: datetime) -> Result:
    """The first half: what the clinician meant, mapped and checked; the Result has no Bundle yet."""
    known = catalogue.load()
    mapped = apply(record, template_map, known)
    issues = [*record.issues, *mapped.issues]
    if mapped.exam is not None:
        issues += [*checks.check(mapped.exam, known), *checks.check_against_clock(mapped.exam, recorded)]
    return Result(mapped.exam, None, tuple(ordered(issues)), mapped.unread, mapped.unknown)


def finish(
    meant: Result,
    form: str,
    *,
    recorded: datetime,
    edition: Edition,
    snomed: bool,
    earlier: dict[str, Any] | None,
) -> Result:
    """The second half: what was understood, coded and judged, unless an issue is an error."""
    exam, issues = meant.exam, list(meant.issues)
    if earlier is not None and exam is not None and (late := draft_after_signed(earlier, exam.status)):
        issues.append(late)
    bundle = None
    if exam is not None and not has_errors(issues):
        bundle = encode(exam, form=form, recorded=recorded, edition=edition, snomed=snomed, earlier=earlier)
        issues += validate(bundle, edition)
    return replace(meant, bundle=None if has_errors(issues) else bundle, issues=tuple(ordered(issues)))
