"""Editing a map's text leaves the rest of it as it stands, and says what was meant."""

from __future__ import annotations

from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from fhirgallop.errors import MapError
from fhirgallop.mapping import editing
from fhirgallop.mapping.reading import read_map

MAPS = sorted((Path(__file__).parents[2] / "examples/informatician").glob("*.yaml"))
BOX = {
    "finding": "heart-sound.venous-hum",
    "field": "heart.hum",
    "choice": {"yes": "present", "no": "absent"},
}


@pytest.fixture(params=MAPS, ids=lambda path: path.stem)
def text(request: pytest.FixtureRequest) -> str:
    return str(request.param.read_text(encoding="utf-8"))


def test_nothing_changed_changes_nothing(text: str) -> None:
    for key in ("lines", "ignore"):
        for at, block in enumerate(editing.entries(text, key)):
            assert editing.put_entry(text, block.value, at, key) == text


def test_a_new_line_comes_last_and_the_rest_stays(text: str) -> None:
    changed = editing.put_entry(text, BOX)
    assert [block.value for block in editing.entries(changed)] == [
        *(block.value for block in editing.entries(text)), BOX
    ]  # fmt: skip
    assert editing.drop_entry(changed, len(editing.entries(text))) == text


def test_remarks_stay_within_a_changed_entry(text: str) -> None:
    for at, block in list(enumerate(editing.entries(text)))[::3]:
        changed = editing.put_entry(text, {**block.value, "instance": "7"}, at)
        old, new = text.splitlines(), changed.splitlines()
        assert new[: block.first] == old[: block.first]
        assert new[len(new) - (len(old) - block.end) :] == old[block.end :]
        remarks = [line.split(" #")[1] for line in old[block.first : block.end] if " #" in line]
        for remark in remarks:
            assert remark in changed
        assert editing.entries(changed)[at].value["instance"] == "7"


def test_a_key_of_the_map_and_of_a_group(text: str) -> None:
    changed = editing.put_part(text, "version", "99")
    template, _ = read_map(changed)
    assert template is not None
    assert template.version == "99"
    assert editing.entries(changed) == editing.entries(text)
    examiner = {"field": "who", "system": "https://a.example/staff"}
    template, _ = read_map(editing.put_part(text, "examiner", examiner, "record"))
    assert template is not None
    assert template.record.examiner is not None
    assert template.record.examiner.field == "who"


def test_a_map_from_nothing() -> None:
    made = editing.new_map("hum-form", 'A "form": with signs')
    party = {"field": "mrn", "system": "https://a.example/p"}
    for part, value in (("patient", party), ("identifier", party), ("time", {"field": "when"})):
        made = editing.put_part(made, part, value, "record")
    made = editing.put_entry(made, BOX)
    made = editing.put_entry(made, {"field": "junk", "reason": "no finding"}, key="ignore")
    template, issues = read_map(made)
    assert issues == []
    assert template is not None
    assert template.title == 'A "form": with signs'
    assert [line.finding for line in template.lines] == ["heart-sound.venous-hum"]


def test_what_forms_cannot_change_is_said() -> None:
    with pytest.raises(MapError) as caught:
        editing.entries("lines: [{finding: thrill, field: a}]\n")
    assert "an entry a line" in caught.value.issues[0].text
    with pytest.raises(MapError):
        editing.put_entry("a: [", BOX)


words = st.text(st.characters(exclude_categories=["C", "Z"]) | st.just(" "), min_size=1, max_size=12).map(
    str.strip
)
tables = st.dictionaries(words.filter(bool), words.filter(bool), min_size=1, max_size=4)


@settings(max_examples=40, deadline=None)
@given(st.lists(tables, min_size=1, max_size=3), tables)
def test_whatever_is_put_in_is_read_back(several: list[dict[str, str]], other: dict[str, str]) -> None:
    made = editing.new_map("m", "M")
    for one in several:
        made = editing.put_entry(made, {"field": "x", "choice": one})
    made = editing.put_entry(made, {"field": "y", "choice": other}, 0)
    expected = [{"field": "y", "choice": other}, *({"field": "x", "choice": one} for one in several[1:])]
    assert [block.value for block in editing.entries(made)] == expected
