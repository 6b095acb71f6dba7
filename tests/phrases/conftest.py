from __future__ import annotations

from collections.abc import Callable

import pytest

from fhirgallop.exam.entry import Entry
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
