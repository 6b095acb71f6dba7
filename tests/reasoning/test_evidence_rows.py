"""Every row of the evidence is a rule or left out with a reason, with the row's tier and strength."""

from __future__ import annotations

import csv
from pathlib import Path

import pytest

from fhirgallop.reasoning.rulebook import load


@pytest.fixture(scope="module")
def rows(shared: Path) -> dict[str, dict[str, str]]:
    with (shared / "evidence" / "knowledge.tsv").open(encoding="utf-8", newline="") as file:
        found = {row["id"]: row for row in csv.DictReader(file, delimiter="\t")}
    assert len(found) == 266
    return found


def test_every_row_is_carried_out_or_left_out(rows: dict[str, dict[str, str]]) -> None:
    book = load()
    carried = {row for rule in book.rules.values() for row in rule.rows}
    assert rows.keys() - carried - book.left_out.keys() == set()
    assert not carried & book.left_out.keys()
    assert all(len(reason) > 20 for reason in book.left_out.values())


def test_tier_and_strength_are_those_of_the_row(rows: dict[str, dict[str, str]]) -> None:
    """A rule that differs from its row says why in its note."""
    for rule in load().rules.values():
        for name in rule.rows:
            row = rows.get(name)
            if row is not None and not rule.note:
                assert rule.tier == row["alert_tier"], rule.id
                assert rule.strength == row["strength"], rule.id


def test_no_rule_is_louder_than_its_row(rows: dict[str, dict[str, str]]) -> None:
    loudness = ["T0", "T3", "T2", "T1", "U"]
    for rule in load().rules.values():
        for name in rule.rows:
            if name in rows:
                assert loudness.index(rule.tier) <= loudness.index(rows[name]["alert_tier"]), rule.id


def test_how_a_source_was_seen_is_that_of_the_row(rows: dict[str, dict[str, str]]) -> None:
    sureness = ["low", "moderate", "high"]
    words = {"seen": "excerpt", "memory": "memory", "common": "practice"}
    for rule in load().rules.values():
        for name in rule.rows:
            row = rows.get(name)
            if row is not None and row["source_access"]:
                assert rule.seen == words[row["source_access"].split()[0]], rule.id
                assert sureness.index(rule.confidence) <= sureness.index(row["confidence"]), rule.id
                assert rule.reading == row["read_verdict"], rule.id
