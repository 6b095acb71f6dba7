from __future__ import annotations

import csv
from pathlib import Path

import pytest

from fhirgallop.errors import AssetError
from fhirgallop.phrases import languages, reader
from fhirgallop.phrases.tokens import words
from fhirgallop.phrases.vocabulary import load

FOLDER = Path(__file__).parents[2] / "terminology" / "phrases"
NAMING = ("finding", "answer", "value", "list", "kind")


def _rows(language: str) -> list[dict[str, str]]:
    with (FOLDER / f"{language}.csv").open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file))


def test_a_language_is_a_file() -> None:
    assert languages() == ("de", "en", "fr")


@pytest.mark.parametrize(("language", "least"), [("en", 400), ("de", 80), ("fr", 80)])
def test_there_are_enough_wordings(language: str, least: int) -> None:
    assert len({row["wording"] for row in _rows(language) if row["use"] in NAMING}) >= least


@pytest.mark.parametrize("language", ["en", "de", "fr"])
def test_no_row_stands_twice_and_every_wording_has_words(language: str) -> None:
    rows = [(row["use"], words(row["wording"]), row["means"]) for row in _rows(language)]
    assert len(rows) == len(set(rows))
    for use, key, _ in rows:
        assert key or use in ("opposite", "drop", "plural", "decimal")


@pytest.mark.parametrize("language", ["en", "de", "fr"])
def test_a_plain_name_is_read_as_the_finding_it_names(language: str) -> None:
    """Every wording of one sign, by itself, says that this sign is present."""
    for row in _rows(language):
        ids = row["means"].split()
        if (
            row["use"] != "finding"
            or len([one for one in ids if "=" not in one]) != 1
            or "presence=" in row["means"]
        ):
            continue
        if load(language).entries and ids[0].startswith(("vital.", "pressure.", "echo.")):
            continue
        read = reader(language).read(row["wording"])
        if read.findings:
            assert {one.entry.finding for one in read.findings} == {ids[0]}, row


@pytest.mark.parametrize("wrong", ["xx", "../en", "EN", ""])
def test_an_unknown_language_is_an_operators_mistake(wrong: str) -> None:
    with pytest.raises(AssetError):
        reader(wrong)
