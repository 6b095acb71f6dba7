"""Builds examinations and charts from the short form of the case files."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from datetime import datetime, timedelta
from decimal import Decimal
from typing import Any

import pytest

from fhirgallop.codes import units
from fhirgallop.exam.context import Context, Fact, Source, State
from fhirgallop.exam.entry import Entry, Grade, Measure, Qualifier
from fhirgallop.exam.exam import Exam, Party
from fhirgallop.exam.moment import Moment
from fhirgallop.exam.presence import Presence
from fhirgallop.reasoning.review import Review, review
from fhirgallop.reasoning.vocabulary import kinds

EXAM_TIME = datetime.fromisoformat("2026-11-30T10:00:00+01:00")
NOW = EXAM_TIME + timedelta(minutes=30)
PATIENT = Party("p-1", "https://clinic.example/patients")
_LENGTHS = {"min": 60, "h": 3600, "d": 86400, "wk": 604800, "mo": 2629800, "a": 31557600}


def _measure(row: Mapping[str, Any]) -> Measure | None:
    if "value" not in row:
        return None
    text = str(row["value"])
    comparator = "<" if text.startswith("<") else ">" if text.startswith(">") else ""
    number, _, unit = text.lstrip("<>").strip().partition(" ")
    low, _, high = number.partition("..")
    code = unit or kinds()[row["id"]].unit
    assert code in units.table().by_code, f"unit {code}"
    return Measure(Decimal(low), code, comparator, Decimal(high) if high else None)


def _qualifiers(row: Mapping[str, Any]) -> tuple[Qualifier, ...]:
    found = []
    for axis, value in row.get("with", {}).items():
        for one in value if isinstance(value, list) else [value]:
            if axis == "grade":
                steps, _, of = str(one).partition("/")
                low, _, high = steps.partition("-")
                found.append(Qualifier("grade", grade=Grade(int(low), int(high or low), int(of))))
            else:
                found.append(Qualifier(axis, str(one)))
    return tuple(sorted(found, key=lambda q: (q.axis, q.value)))


def _answers(row: Mapping[str, Any]) -> tuple[str, ...]:
    given = row.get("answer", ())
    return tuple(given) if isinstance(given, list) else (given,) if given else ()


def _known(row: Mapping[str, Any]) -> str:
    assert row["id"] in kinds(), f"unknown id {row['id']}"
    return str(row["id"])


def make_entry(row: Mapping[str, Any]) -> Entry:
    """An entry of the examination from its short form."""
    return Entry(
        _known(row),
        Presence(row.get("is", "present")),
        answers=_answers(row),
        measure=_measure(row),
        qualifiers=_qualifiers(row),
        instance=str(row.get("instance", "")),
    )


def make_fact(row: Mapping[str, Any]) -> Fact:
    """A fact of the chart from its short form; `age` counts back from the examination."""
    time = str(row.get("time", ""))
    if "age" in row:
        number, _, unit = str(row["age"]).partition(" ")
        time = (EXAM_TIME - timedelta(seconds=int(number) * _LENGTHS[unit])).isoformat()
    return Fact(
        _known(row),
        State(row.get("is", "present")),
        Source(row.get("from", "problem-list")),
        answers=_answers(row),
        measure=_measure(row),
        qualifiers=_qualifiers(row),
        time=time,
        encounter=str(row.get("encounter", "")),
        low_trust=bool(row.get("low-trust", False)),
    )


@dataclass(frozen=True)
class Made:
    """Examination and chart of one case."""

    exam: Exam
    context: Context

    def review(self, **keywords: Any) -> Review:
        return review(self.exam, self.context, **keywords)


def make(exam: list[Mapping[str, Any]], chart: list[Mapping[str, Any]]) -> Made:
    """Examination and chart from short forms."""
    entries = tuple(make_entry(row) for row in exam)
    facts = tuple(make_fact(row) for row in chart)
    encounter = Party("e-1", "https://clinic.example/encounters")
    return Made(
        Exam(PATIENT, "x-1", "https://clinic.example/exams", Moment(EXAM_TIME.isoformat()), entries,
             encounter=encounter),
        Context(NOW, facts, PATIENT),
    )  # fmt: skip


@pytest.fixture(scope="session")
def made() -> Callable[[list[Mapping[str, Any]], list[Mapping[str, Any]]], Made]:
    """Makes examination and chart from short forms."""
    return make
