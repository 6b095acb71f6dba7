"""Examinations for drawings, said in a line an entry: `finding [presence|answer|number] axis=value ...`."""

from __future__ import annotations

from collections.abc import Callable
from decimal import Decimal

import pytest

from fhirgallop.exam import catalogue
from fhirgallop.exam.entry import Entry, Grade, Measure, Qualifier
from fhirgallop.exam.exam import Exam, Party
from fhirgallop.exam.moment import Moment
from fhirgallop.exam.presence import Presence


def entry(line: str) -> Entry:
    """One entry from its line; `grade=3/6` makes a grade."""
    finding, *words = line.split()
    known = catalogue.load()
    definition = known.findings[finding]
    qualifiers: list[Qualifier] = []
    presence, answers, measure = Presence.PRESENT, (), None
    for word in words:
        axis, equals, value = word.partition("=")
        if equals and axis == "grade":
            low, _, of = value.partition("/")
            qualifiers.append(Qualifier("grade", grade=Grade(int(low), int(low), int(of))))
        elif equals:
            assert value in known.axes[axis].values, f"{axis} has no {value}"
            qualifiers.append(Qualifier(axis, value))
        elif definition.kind == "quantity":
            measure = Measure(Decimal(word), definition.unit)
        elif word in known.answers(definition):
            answers = (word,)
        else:
            presence = Presence(word)
    return Entry(finding, presence, answers, measure, qualifiers=tuple(qualifiers))


@pytest.fixture(scope="session")
def exam() -> Callable[..., Exam]:
    """An examination of these lines."""

    def make(*lines: str) -> Exam:
        return Exam(
            Party("P-1", "urn:p"), "E-1", "urn:e", Moment("2026-03-14T09:30:00+01:00"),
            tuple(map(entry, lines)),
        )  # fmt: skip

    return make
