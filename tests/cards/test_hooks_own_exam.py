"""Examinations that fhirgallop wrote come back from their Observations as they were meant."""

from __future__ import annotations

import json
from dataclasses import replace
from datetime import UTC, datetime
from decimal import Decimal
from pathlib import Path
from typing import Any

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from fhirgallop.chart.gather import gather
from fhirgallop.chart.log import Log
from fhirgallop.chart.own_exam import OwnExam, gather_own_exams, read_own_exam
from fhirgallop.chart.times import Times
from fhirgallop.codes import fhirjson
from fhirgallop.exam import catalogue
from fhirgallop.exam.catalogue import FindingDefinition
from fhirgallop.exam.entry import Entry, Grade, Measure, Qualifier
from fhirgallop.exam.exam import Exam, Party
from fhirgallop.exam.moment import Moment
from fhirgallop.exam.presence import Presence
from fhirgallop.observations.bundle import encode

NOW = datetime(2026, 3, 14, 12, tzinfo=UTC)
PATIENT = Party("p1", is_fhir_id=True)
START = "2026-03-14T09:30:00Z"


def exam_of(*entries: Entry, **changed: Any) -> Exam:
    exam = Exam(PATIENT, "x1", "", Moment(START), entries, encounter=Party("e1", is_fhir_id=True))
    return replace(exam, **changed)


def read_back(*exams: Exam, snomed: bool = True, edition: Any = "R4") -> tuple[list[OwnExam], Log]:
    """Written, sent as JSON, and read again."""
    log = Log()
    bundles = [encode(exam, form="json", recorded=NOW, snomed=snomed, edition=edition) for exam in exams]
    chart = fhirjson.read(fhirjson.write(bundles))[0]
    return read_all(chart, log), log


def read_all(chart: Any, log: Log) -> list[OwnExam]:
    """Every examination with something in it."""
    found = gather_own_exams(gather(chart, log), Times(NOW, log))
    return [own for one in found if (own := read_own_exam(one, PATIENT, log)).exam.entries]


def said(entry: Entry) -> tuple[Any, ...]:
    number = (
        (entry.measure.value, entry.measure.unit, entry.measure.comparator, entry.measure.high)
        if entry.measure
        else None
    )
    qualifiers = frozenset((q.axis, q.value, q.grade, q.text) for q in entry.qualifiers)
    return entry.finding, entry.presence, frozenset(entry.answers), number, entry.text, qualifiers, entry.time


def _plain() -> list[FindingDefinition]:
    """Findings that stand alone: a panel's parts share its properties."""
    return [f for f in catalogue.load().findings.values() if f.kind != "panel" and not f.within]


@st.composite
def entries(draw: st.DrawFn) -> Entry:
    """One entry of any finding of the catalogue, with what its definition allows."""
    known = catalogue.load()
    definition = draw(st.sampled_from(_plain()))
    presence = draw(st.sampled_from(list(Presence)))
    qualifiers = []
    for axis in sorted(definition.qualifiers):
        values = sorted(known.axes[axis].values)
        if axis == "grade" and draw(st.booleans()):
            qualifiers.append(Qualifier(axis, grade=Grade(2, draw(st.integers(2, 4)), 6)))
        elif values and draw(st.integers(0, 3)) == 0:
            qualifiers.append(Qualifier(axis, draw(st.sampled_from(values))))
    entry = Entry(definition.id, presence, qualifiers=tuple(qualifiers))
    if not presence.looked_for:
        return entry
    if definition.kind == "choice":
        return replace(
            entry,
            presence=Presence.PRESENT,
            answers=(draw(st.sampled_from(sorted(known.answers(definition)))),),
        )
    if definition.kind == "quantity":
        low = definition.low if definition.low is not None else Decimal(1)
        number = Measure(
            low + draw(st.integers(0, 5)), definition.unit, draw(st.sampled_from(["", "<", ">="]))
        )
        return replace(entry, presence=Presence.PRESENT, measure=number)
    if definition.kind == "text":
        return replace(entry, presence=Presence.PRESENT, text="as written")
    return entry


@settings(max_examples=150, deadline=None, derandomize=True, suppress_health_check=list(HealthCheck))
@given(st.lists(entries(), min_size=1, max_size=6, unique_by=lambda e: e.finding), st.booleans(),
       st.sampled_from(["R4", "R4B", "R5"]))  # fmt: skip
def test_every_entry_comes_back(given_: list[Entry], snomed: bool, edition: str) -> None:
    exam = exam_of(*given_)
    (own,), log = read_back(exam, snomed=snomed, edition=edition)
    expected = {said(_without_fixed_site(entry)) for entry in given_}
    assert {said(entry) for entry in own.exam.entries} == expected
    assert not [issue for issue in log.all() if issue.is_error]
    assert own.exam.time == exam.time
    assert own.exam.encounter == exam.encounter


def _without_fixed_site(entry: Entry) -> Entry:
    """A place that the finding itself fixes is no property of it."""
    site = catalogue.load().findings[entry.finding].site
    kept = tuple(q for q in entry.qualifiers if not (q.axis == "site" and q.value == site and site))
    return replace(entry, qualifiers=kept)


def test_the_example_examination_comes_back_whole(root: Path) -> None:
    from fhirgallop.api import process  # noqa: PLC0415

    record = (root / "examples/ehr/fernwood-exam.json").read_bytes()
    exam = process(record, root / "examples/informatician/fernwood-heart-form.yaml").exam
    assert exam is not None
    (own,), _ = read_back(exam)

    def plain(entry: Entry) -> tuple[Any, ...]:
        # the parts of a blood pressure share its properties
        return said(
            replace(entry, qualifiers=() if entry.finding.startswith("pressure.") else entry.qualifiers)
        )

    assert sorted(map(repr, map(plain, own.exam.entries))) == sorted(map(repr, map(plain, exam.entries)))


def test_several_answers_are_one_entry_again() -> None:
    definition = next(f for f in _plain() if f.kind == "choice" and len(catalogue.load().answers(f)) > 2)
    answers = tuple(sorted(catalogue.load().answers(definition))[:2])
    (own,), _ = read_back(exam_of(Entry(definition.id, answers=answers)))
    (entry,) = own.exam.entries
    assert set(entry.answers) == set(answers)


def test_two_murmurs_stay_two() -> None:
    places = sorted(catalogue.load().axes["site"].values)[:2]
    murmurs = [
        Entry("murmur.systolic", qualifiers=(Qualifier("site", place),), instance=place) for place in places
    ]
    (own,), _ = read_back(exam_of(*murmurs))
    assert sorted(q.value for e in own.exam.entries for q in e.qualifiers) == places
    assert len({entry.key for entry in own.exam.entries}) == 2


def test_an_entry_with_a_time_of_its_own_stays_in_its_examination() -> None:
    later = Entry("heart-sound.s3", time="2026-03-14T09:40:00Z")
    (own,), _ = read_back(exam_of(Entry("heart-sound.s4"), later))
    assert {entry.finding: entry.time for entry in own.exam.entries} == {
        "heart-sound.s4": "",
        "heart-sound.s3": "2026-03-14T09:40:00Z",
    }


def test_two_examinations_stay_two() -> None:
    earlier = exam_of(Entry("heart-sound.s3"), identifier="x0", time=Moment("2026-03-13T09:30:00Z"))
    own, _ = read_back(earlier, exam_of(Entry("heart-sound.s4")))
    assert {(one.exam.time.start[:10], one.exam.entries[0].finding) for one in own} == {
        ("2026-03-13", "heart-sound.s3"),
        ("2026-03-14", "heart-sound.s4"),
    }


@pytest.mark.parametrize("status", ["entered-in-error", "cancelled"])
def test_what_was_taken_back_does_not_come_back(status: str) -> None:
    bundle = json.loads(fhirjson.write(encode(exam_of(Entry("heart-sound.s4")), form="json", recorded=NOW)))
    for entry in bundle["entry"]:
        if "status" in entry["resource"]:
            entry["resource"]["status"] = status
    log = Log()
    assert read_all(bundle, log) == []


def test_a_meaning_turned_round_is_not_read() -> None:
    bundle = json.loads(fhirjson.write(encode(exam_of(Entry("heart-sound.s4")), form="json", recorded=NOW)))
    for entry in bundle["entry"]:
        entry["resource"]["modifierExtension"] = [{"url": "https://a.example/not", "valueBoolean": True}]
    log = Log()
    assert read_all(bundle, log) == []
    assert "chart-modifier" in {issue.rule for issue in log.all()}


def test_what_lies_ahead_is_not_read() -> None:
    own, log = read_back(exam_of(Entry("heart-sound.s4"), time=Moment("2026-03-15T09:30:00Z")))
    assert own == []
    assert "chart-future" in {issue.rule for issue in log.all()}
