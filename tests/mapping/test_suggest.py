"""Suggestions for fields nobody has seen: labels made up for this list and kept apart from the synonyms."""

from __future__ import annotations

import csv
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from fhirgallop.exam import catalogue
from fhirgallop.mapping.suggest import suggest
from fhirgallop.mapping.suggest_values import Target, suggest_values

CASES = Path(__file__).parents[1] / "cases/mapping/suggest"
# the second list was made when the first had been looked at, by somebody who had not seen it
FILES = {"labels.csv": 120, "labels-2.csv": 60}


def _rows(name: str) -> list[dict[str, str]]:
    with (CASES / name).open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file))


@pytest.mark.parametrize("name", FILES)
def test_the_right_one_is_first_in_80_and_among_three_in_95_of_100(name: str) -> None:
    rows = _rows(name)
    assert len(rows) >= FILES[name]
    found = [
        [
            str(one.target)
            for one in suggest(row["label"], values=row["values"].split("|"), section=row["section"])
        ]
        for row in rows
    ]
    first = sum(names[:1] == [row["right"]] for names, row in zip(found, rows, strict=True))
    among = sum(row["right"] in names for names, row in zip(found, rows, strict=True))
    assert first >= 0.80 * len(rows)
    assert among >= 0.95 * len(rows)


@pytest.mark.parametrize("name", FILES)
def test_the_labels_are_none_of_the_catalogues_own_wordings(name: str) -> None:
    known = catalogue.load()
    own = {one.wording.lower() for one in known.synonyms} | {f.label.lower() for f in known.findings.values()}
    assert not [row["label"] for row in _rows(name) if row["label"].lower() in own]


def test_every_suggestion_says_why() -> None:
    for one in suggest("S4_heard", values=["yes", "no"], section="Heart"):
        assert one.reasons


def test_a_side_in_the_name_is_told_apart() -> None:
    assert suggest("carotid_bruit_left", values=["y", "n"])[0].side == "left"


def test_numbers_speak_against_a_sign_and_for_a_number() -> None:
    wordy = suggest("apex", values=["yes", "no"])
    assert all(catalogue.load().findings[one.target.finding].kind != "quantity" for one in wordy[:1])
    assert str(suggest("EF", values=["55", "60"])[0].target) == "echo.lvef"


def test_wordings_of_a_box() -> None:
    found = suggest_values(Target("heart-sound.s4"), ["Y", "n", "?", "not done", "purple"])
    assert found == {"Y": "present", "n": "absent", "?": "uncertain", "not done": "not-examined"}
    timing = suggest_values(Target("murmur", "timing"), ["pansystolic", "Early diastolic", "whenever"])
    assert timing == {"pansystolic": "holosystolic", "Early diastolic": "early-diastolic"}


@settings(max_examples=60, deadline=None)
@given(st.text(max_size=300), st.lists(st.text(max_size=40), max_size=5), st.text(max_size=60))
def test_no_text_raises(name: str, values: list[str], section: str) -> None:
    found = suggest(name, values=values, section=section)
    assert len(found) <= 3
