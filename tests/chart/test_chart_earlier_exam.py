"""Examinations that fhirgallop wrote, read again: absent and not examined stay so, in every edition."""

from __future__ import annotations

from dataclasses import replace
from datetime import datetime, timedelta
from pathlib import Path
from typing import Any, Literal

import pytest

from fhirgallop.api import process
from fhirgallop.chart.read import read_chart
from fhirgallop.codes import fhirjson
from fhirgallop.exam.context import Source, State
from fhirgallop.exam.exam import Exam
from fhirgallop.exam.moment import Moment
from fhirgallop.exam.presence import Presence
from fhirgallop.reasoning.review import review

EDITIONS: tuple[Literal["R4", "R4B", "R5"], ...] = ("R4", "R4B", "R5")
LATER = datetime.fromisoformat("2026-04-14T10:00:00+02:00")


@pytest.fixture(scope="module", params=[(e, s) for e in EDITIONS for s in (True, False)], ids=str)
def written(request: pytest.FixtureRequest, root: Path) -> tuple[Exam, Any]:
    """The example examination and its Bundle, after a journey as JSON, with SNOMED CT codings and without."""
    edition, snomed = request.param
    record = (root / "examples/ehr/fernwood-exam.json").read_bytes()
    result = process(record, root / "examples/informatician/fernwood-heart-form.yaml", edition, snomed=snomed)
    assert result.exam is not None
    bundle, issues = fhirjson.read(fhirjson.write(result.bundle))
    assert not issues
    return result.exam, bundle


def next_month(exam: Exam) -> Exam:
    time = Moment("2026-04-14T09:30:00+02:00")
    entries = tuple(replace(entry, time="") for entry in exam.entries)
    return replace(exam, time=time, identifier="next", encounter=None, entries=entries)


def test_every_entry_comes_back_as_it_was_said(written: tuple[Exam, Any]) -> None:
    exam, bundle = written
    chart = read_chart(bundle, next_month(exam), LATER)
    facts: dict[tuple[str, str], Any] = {}
    for fact in chart.context.facts:
        facts[fact.id, fact.qualifier("side")] = fact
    text_only = {"heart.narrative"}
    for entry in exam.entries:
        side = next((q.value for q in entry.qualifiers if q.axis == "side"), "")
        if entry.finding in text_only or not entry.presence.looked_for:
            assert (entry.finding, side) not in facts, "not examined is not a finding"
            continue
        fact = facts.pop((entry.finding, side))
        expected = State.PRESENT if entry.presence is Presence.PRESENT else State.ABSENT
        assert fact.state is expected
        assert set(fact.answers) == set(entry.answers)
        assert (fact.measure is None) == (entry.measure is None)
        if entry.measure is not None:
            assert (fact.measure.value, fact.measure.high) == (entry.measure.value, entry.measure.high)
            assert fact.measure.unit == entry.measure.unit
        if not entry.finding.startswith("pressure."):
            # the panel's components share the properties of its parts; the clinician's own words stay behind
            said = {(q.axis, q.value, q.grade) for q in entry.qualifiers if not q.text}
            assert {(q.axis, q.value, q.grade) for q in fact.qualifiers} == said
        assert fact.time == (entry.time or exam.time.start)
        assert fact.source is (Source.ECHO if entry.finding.startswith("echo.") else Source.EARLIER_EXAM)
    assert not facts
    assert {i.rule for i in chart.issues} <= {"chart-unknown-codes"}


def test_this_very_examination_is_not_an_earlier_one(written: tuple[Exam, Any]) -> None:
    exam, bundle = written
    chart = read_chart(bundle, exam, datetime.fromisoformat("2026-03-14T10:00:00+01:00"))
    assert chart.context.facts == ()


def test_a_number_of_another_day_that_this_examination_repeats_is_not_an_earlier_one(
    written: tuple[Exam, Any],
) -> None:
    exam, bundle = written
    again = replace(next_month(exam), entries=exam.entries)
    facts = {fact.id for fact in read_chart(bundle, again, LATER).context.facts}
    repeated = {entry.finding for entry in exam.entries if entry.time}
    assert repeated == {"echo.lvef", "echo.e-e-prime-ratio", "echo.la-volume-index", "echo.ivc-diameter"}
    assert facts
    assert facts.isdisjoint(repeated)


def test_what_changed_since_then(written: tuple[Exam, Any]) -> None:
    """The fourth sound gone and a third one new, against the examination in the chart."""
    exam, bundle = written
    entries = tuple(
        replace(e, presence=Presence.ABSENT, qualifiers=())
        if e.finding == "heart-sound.s4"
        else replace(e, presence=Presence.PRESENT)
        for e in exam.entries
        if e.finding in ("heart-sound.s4", "heart-sound.s3")
    )
    today = replace(next_month(exam), entries=entries)
    found = review(today, read_chart(bundle, today, LATER).context)
    assert {(c.kind, c.now.id) for c in found.changes} == {
        ("gone", "heart-sound.s4"),
        ("appeared", "heart-sound.s3"),
    }


def test_withdrawn_findings_are_not_read(written: tuple[Exam, Any]) -> None:
    exam, bundle = written
    taken_back = [
        {**e, "resource": {**e["resource"], "status": "entered-in-error"}}
        if e["resource"]["resourceType"] == "Observation"
        else e
        for e in bundle["entry"]
    ]
    chart = read_chart({**bundle, "entry": taken_back}, next_month(exam), LATER + timedelta(days=1))
    assert chart.context.facts == ()
