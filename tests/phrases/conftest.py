from __future__ import annotations

from collections.abc import Callable
from typing import Any

import pytest

from fhirgallop.exam.entry import Entry
from fhirgallop.exam.exam import Exam
from fhirgallop.observations.build import Shared, builder
from fhirgallop.phrases import ReadLine


def said_of(entry: Entry) -> list[str]:
    """An entry in the short form of tests/cases/phrases/."""
    if entry.measure is not None:
        measure = entry.measure
        number = f"{measure.comparator}{measure.value}"
        number += f"-{measure.high}" if measure.high is not None else ""
        heads = [f"{number} {measure.unit}"]
    else:
        heads = list(entry.answers) or [str(entry.presence)]
    qualifiers = [f"{q.axis}={q.grade or q.value}" for q in entry.qualifiers]
    return [" ".join([entry.finding, head, *sorted(qualifiers)]) for head in heads]


@pytest.fixture
def said() -> Callable[[ReadLine], list[str]]:
    def of(line: ReadLine) -> list[str]:
        return sorted(one for finding in line.findings for one in said_of(finding.entry))

    return of


@pytest.fixture
def coded() -> Callable[[Exam], list[dict[str, Any]]]:
    """The Observations of an examination."""

    def of(exam: Exam) -> list[dict[str, Any]]:
        shared = Shared.of(exam, "2026-03-14T10:00:00Z")
        return [resource for _, resource in builder(snomed=True).all_of(exam, shared)]

    return of
