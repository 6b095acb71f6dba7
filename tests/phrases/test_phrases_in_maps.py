from __future__ import annotations

from typing import Any

import pytest

from fhirgallop.exam import catalogue
from fhirgallop.exam.presence import Presence
from fhirgallop.intake.record import Field, Header, LocalRecord
from fhirgallop.mapping.apply import Mapped, apply
from fhirgallop.mapping.reading import read_map

MAP = """\
template-map: "1"
name: line
version: "1"
record:
  patient: {field: pid, system: "https://clinic.example/patients"}
  identifier: {field: no, system: "https://clinic.example/exams"}
  time: {field: at, zone: Z}
lines:
  - finding: heart-sound.s4
    field: s4
    choice: {"yes": present, "no": absent, "maybe": uncertain}
  - finding: heart-sound.s1-intensity
    field: s1
    choice: {"loud": loud, "soft": soft}
  - finding: vital.heart-rate
    field: hr
    number: {unit: /min}
  - field: heart
    words: {language: en, status: preliminary}
"""


def _mapped(**boxes: str) -> Mapped:
    template, issues = read_map(MAP, name="map.yaml")
    assert template, issues
    values = {"pid": "P", "no": "E1", "at": "2026-03-14T09:30:00Z", "s4": "", "s1": "", "hr": "", **boxes}
    fields = {name: Field(name, (value,)) for name, value in values.items()}
    return apply(LocalRecord("json", fields, Header(), source="r.json"), template, catalogue.load())


def _rules(mapped: Mapped) -> list[tuple[str, str]]:
    return [(issue.severity, issue.rule) for issue in mapped.issues]


def test_a_line_gives_entries_with_their_words() -> None:
    mapped = _mapped(heart="no S3, III/VI systolic murmur at apex")
    assert mapped.exam
    assert [(e.finding, e.presence, e.words, e.fields, e.preliminary) for e in mapped.exam.entries] == [
        ("heart-sound.s3", Presence.ABSENT, "no S3", ("heart",), True),
        ("murmur.systolic", Presence.PRESENT, "III/VI systolic murmur at apex", ("heart",), True),
    ]
    assert mapped.issues == ()
    assert mapped.exam.notes == ("no S3, III/VI systolic murmur at apex",)


@pytest.mark.parametrize(
    ("boxes", "line", "about"),
    [
        ({"s4": "yes"}, "no S4", "presence"),
        ({"s4": "no"}, "S4 heard", "presence"),
        ({"s4": "yes"}, "S4 not assessed", "presence"),
        ({"s1": "loud"}, "S1 soft", "answer"),
        ({"hr": "76"}, "HR 96", "number"),
    ],
)
def test_line_and_box_that_disagree_are_an_error(boxes: dict[str, str], line: str, about: str) -> None:
    mapped = _mapped(**boxes, heart=line)
    assert _rules(mapped) == [("error", "map-line-and-box-disagree")]
    issue = mapped.issues[0]
    assert f"({about})" in issue.text
    assert issue.field == f"{next(iter(boxes))}, heart"


def test_line_and_box_that_agree_are_one_entry_and_the_box_stands() -> None:
    mapped = _mapped(s4="yes", heart="S4 at apex")
    assert mapped.exam
    (entry,) = mapped.exam.entries
    assert (entry.words, entry.fields, entry.notes) == ("", ("s4", "heart"), ("S4 at apex",))
    assert [(q.axis, q.value) for q in entry.qualifiers] == [("site", "mitral")]
    assert mapped.issues == ()


def test_doubt_of_the_line_beside_a_sure_box_is_told() -> None:
    mapped = _mapped(s4="no", heart="no S3, S4")
    assert mapped.exam
    assert [(e.finding, e.presence) for e in mapped.exam.entries] == [
        ("heart-sound.s4", Presence.ABSENT),
        ("heart-sound.s3", Presence.ABSENT),
    ]
    assert ("warning", "map-line-and-box-differ") in _rules(mapped)
    assert ("warning", "phrase-scope-doubtful") in _rules(mapped)


def test_words_that_were_not_read_come_back() -> None:
    mapped = _mapped(heart="no S3, purple elephants")
    assert [(one.field, one.value) for one in mapped.unknown] == [("heart", "purple elephants")]
    assert _rules(mapped) == [("warning", "map-words-unread")]
    assert "purple" not in mapped.issues[0].text


def test_two_murmurs_of_one_kind_are_two_entries() -> None:
    mapped = _mapped(heart="2/6 systolic murmur at apex and 3/6 systolic murmur at RUSB")
    assert mapped.exam
    assert [(e.finding, e.instance) for e in mapped.exam.entries] == [
        ("murmur.systolic", ""),
        ("murmur.systolic", "2"),
    ]


def test_an_unknown_language_and_a_missing_field_are_faults_of_the_map() -> None:
    for old, new, rule in (
        ("language: en", "language: xx", "map-unknown-language"),
        ("  - field: heart\n    words", "  - words", "map-missing-key"),
        ("    words: {", "    blank-means: absent\n    words: {", "map-contradictory-keys"),
    ):
        template, issues = read_map(MAP.replace(old, new), name="map.yaml")
        assert template is None
        assert [issue.rule for issue in issues] == [rule]


def test_what_goes_out_is_marked(coded: Any) -> None:
    mapped = _mapped(s4="yes", heart="no S3, BP 138/82")
    assert mapped.exam
    by_code = {one["code"]["text"]: one for one in coded(mapped.exam)}
    third, pressure = by_code["Third heart sound"], by_code["Blood pressure"]
    for one, words in ((third, "no S3"), (pressure, "BP 138/82")):
        assert one["status"] == "preliminary"
        assert [tag["code"] for tag in one["meta"]["tag"]] == ["read-from-words"]
        assert one["note"] == [{"text": words}]
    box = by_code["Fourth heart sound"]
    assert box["status"] == "final"
    assert "tag" not in box["meta"]
