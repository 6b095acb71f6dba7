"""What may be noticed of an examination that was accepted: checks of its values, and of its coded form."""

from __future__ import annotations

from typing import Final, cast

from fhirgallop.codes import fhirjson
from fhirgallop.conformance.validator import validate
from fhirgallop.exam import catalogue, checks
from fhirgallop.observations.editions import Edition
from fhirgallop.outcome import Issue, ordered
from fhirgallop.service.views.examination import Examination
from fhirgallop.storage.submissions import Submission

_SILENT: Final = "information"


def remarks(row: Submission, exam: Examination) -> list[Issue]:
    """Issues with this version, most severe first, each sentence once; what only informs is left out."""
    found = [
        *checks.check(exam.own.exam, catalogue.load()),
        *validate(fhirjson.read(row.bundle)[0], cast("Edition", row.edition)),
    ]
    by_text = {issue.text: issue for issue in found if issue.severity != _SILENT}
    return list(ordered(by_text.values()))
