"""A box that may hold several answers, sent again: each answer keeps its identity, whatever joins it."""

from __future__ import annotations

from datetime import timedelta

import pytest

from fhirgallop.exam.catalogue import load
from fhirgallop.exam.checks import check
from fhirgallop.intake.record import Field, LocalRecord
from fhirgallop.mapping.apply import apply
from fhirgallop.mapping.reading import read_map
from fhirgallop.pipeline import process

MAP = """\
template-map: 1
name: answers
version: "1"
local-system: "https://fernwood.example/heart-form"
record:
  patient: {field: pid, system: "https://fernwood.example/patients"}
  identifier: {field: no, system: "https://fernwood.example/examinations"}
  time: {field: at}
lines:
  - finding: apex.character
    field: apex
    choices: {separator: ",", values: {s: sustained, d: double, held: sustained, ne: not-examined}}
    qualifiers: {posture: {field: posture, choice: {lying: supine}}}
"""


@pytest.fixture(scope="module")
def answers():
    template, issues = read_map(MAP)
    assert template is not None, issues
    return template


def record(apex: str, **more: str) -> LocalRecord:
    cells = {"pid": "F-1", "no": "E-1", "at": "2026-03-14T09:30:00+01:00", "apex": apex, **more}
    return LocalRecord("json", {name: Field(name, (cell,)) for name, cell in cells.items()})


def said(bundle) -> dict[str, dict]:
    """Answer -> the Observation that says it."""
    found = {}
    for entry in bundle["entry"]:
        resource = entry["resource"]
        codes = [coding["code"] for coding in resource.get("code", {}).get("coding", ())]
        if "apex.character" in codes:
            value = resource.get("valueCodeableConcept", {"text": "none"})
            assert value["text"] not in found
            found[value["text"]] = resource
    return found


@pytest.mark.parametrize("posture", [{}, {"posture": "lying"}])
def test_an_answer_that_stays_is_unchanged_when_another_joins_it(answers, moment, posture):
    first = process(record("s", **posture), answers, recorded=moment).bundle
    later = process(
        record("d, s", **posture), answers, recorded=moment + timedelta(hours=1), earlier=first
    ).bundle
    before, after = said(first), said(later)
    (sustained,) = before
    assert after[sustained] == before[sustained]
    assert after.keys() - before.keys() == {"Double"}
    assert {one["status"] for one in after.values()} == {"final"}
    third = process(record("d", **posture), answers, recorded=moment + timedelta(hours=2), earlier=later)
    last = said(third.bundle)
    assert last[sustained]["status"] == "entered-in-error"
    assert last["Double"] == after["Double"]


def test_each_answer_keeps_the_wording_that_was_chosen(answers, moment):
    bundle = process(record("s, held, d"), answers, recorded=moment).bundle
    chosen = {
        coding["code"]
        for one in said(bundle).values()
        for coding in one["valueCodeableConcept"]["coding"]
        if coding.get("userSelected")
    }
    assert chosen == {"s", "d"}


def test_the_examination_says_the_box_once(answers):
    exam = apply(record("s,d"), answers, load()).exam
    (entry,) = exam.entries
    assert entry.answers == ("sustained", "double")
    assert [one.key for one in entry.by_answer()] == [
        ("apex.character", "/sustained"),
        ("apex.character", "/double"),
    ]
    assert check(exam, load()) == []


def test_two_boxes_with_different_answers_are_still_entered_twice():
    line = "  - {finding: apex.character, field: %s, when: {field: %s, blank: false}, choices: %s}\n"
    values = '{separator: ",", values: {s: sustained, d: double}}'
    head, _, _ = MAP.partition("  - finding")
    template, issues = read_map(head + line % ("a", "a", values) + line % ("b", "b", values))
    assert template is not None, issues
    for a, b, rules in (
        ("s", "s,d", ["exam-entered-twice"]),
        ("s", "d", ["exam-entered-twice"]),
        ("s", "s", []),
    ):
        fields = {**record("").fields, "a": Field("a", (a,)), "b": Field("b", (b,))}
        exam = apply(LocalRecord("json", fields), template, load()).exam
        assert [issue.rule for issue in check(exam, load())] == rules
