"""Every fault of a map is found at once, with its line and a cure (cases in bad-maps.yaml)."""

from __future__ import annotations

from pathlib import Path

import pytest
from ruamel.yaml import YAML

from fhirgallop.errors import MapError
from fhirgallop.mapping.document import MAX_BYTES, MAX_DEPTH, MAX_NODES
from fhirgallop.mapping.reading import load_map, read_map

CASES = YAML(typ="safe").load(
    (Path(__file__).parents[1] / "cases" / "mapping" / "bad-maps.yaml").read_text("utf-8")
)

HEAD = """\
template-map: 1
name: case
version: "1"
record:
  patient: {field: pid, system: "https://fernwood.example/patients"}
  identifier: {field: no, system: "https://fernwood.example/examinations"}
  time: {field: at, zone: "+01:00"}
blanks: ["nan"]
"""


def text_of(case: dict) -> str:
    if "whole" in case:
        return case["whole"]
    return HEAD + "lines:\n" + case["lines"] + "sections: {Heart: {blank-means: absent}}\n"


@pytest.mark.parametrize("case", CASES, ids=[case["title"] for case in CASES])
def test_faults(case):
    template, issues = read_map(text_of(case), name="form.yaml")
    assert template is None
    found = sorted((issue.line, issue.rule) for issue in issues)
    assert found == sorted((e["line"], e["rule"]) for e in case["expect"]), "\n".join(map(str, issues))
    for expected in case["expect"]:
        texts = [i.text for i in issues if (i.line, i.rule) == (expected["line"], expected["rule"])]
        assert any(expected["says"] in text for text in texts), texts
    assert {issue.source for issue in issues} == {"form.yaml"}


def test_issues_stand_in_the_order_of_the_text():
    text = HEAD + "lines:\n  - {finding: a}\n  - {finding: b}\nunknown-values: maybe\nzzz: 1\n"
    _, issues = read_map(text)
    assert [issue.line for issue in issues] == sorted(issue.line for issue in issues)
    assert len(issues) == 4


def test_too_large_too_deep_too_many():
    assert rules(b"#" * (MAX_BYTES + 1)) == ["map-too-large"]
    assert rules("a: " + "[" * (MAX_DEPTH + 1)) == ["map-too-deep"]
    assert rules("a: [" + "1," * MAX_NODES + "1]") == ["map-too-large"]


def test_too_many_lines():
    line = (
        '  - {finding: heart-sound.s4, field: s4, when: {field: x, blank: true}, choice: {"yes": present}}\n'
    )
    assert rules(HEAD + "lines:\n" + line * 2001) == ["map-too-large"]


def test_not_utf8_and_control_characters():
    assert rules(b"template-map: 1\nname: caf\xe9\n") == ["map-not-utf8"]
    assert read_map(b"template-map: 1\nname: caf\xe9\n")[1][0].line == 2
    assert rules("name: a\x00b") == ["map-yaml"]
    assert rules('name: "\\UFFFFFFFF"') == ["map-yaml"]


def test_a_byte_order_mark_does_no_harm():
    text = HEAD + 'lines:\n  - {finding: heart-sound.s4, field: s4, choice: {"yes": present}}\n'
    assert read_map("\ufeff" + text)[1] == []
    assert read_map(("\ufeff" + text).encode())[1] == []


def test_thousands_of_faults_stay_quick_and_are_all_told():
    text = (
        HEAD
        + "lines:\n"
        + "".join(f"  - {{finding: hart-sound.s{n}, field: f{n}, text: true}}\n" for n in range(1500))
    )
    _, issues = read_map(text)
    assert len(issues) == 1500
    assert "Did you mean" in issues[0].text
    assert "Did you mean" not in issues[-1].text


def test_loading_a_file(tmp_path):
    path = tmp_path / "form.yaml"
    path.write_text("name: a\n", encoding="utf-8")
    with pytest.raises(MapError) as caught:
        load_map(path)
    assert len(caught.value.issues) == 4
    assert "4 faults" in str(caught.value)
    with pytest.raises(MapError) as caught:
        load_map(tmp_path / "none.yaml")
    assert caught.value.issues[0].rule == "map-file"


def rules(text: str | bytes) -> list[str]:
    template, issues = read_map(text)
    assert template is None
    return [issue.rule for issue in issues]
