"""The report: what was coded, what was not, what the rules would have raised; free of what records hold."""

from __future__ import annotations

import json
from collections.abc import Callable
from dataclasses import replace
from html.parser import HTMLParser
from pathlib import Path
from typing import Any

import pytest

from fhirgallop.bulk.report import report
from fhirgallop.bulk.tally import MOST_KINDS, OTHERS, Tally
from fhirgallop.bulk.wish import Wish

Backfill = Callable[..., tuple[Path, Tally]]

ROWS = [
    "E1,P1,2020-01-01,yes,70,no,",
    "E2,P2,2020-01-02,no,71,yes,",
    "E3,P3,2021-01-02,secret wording,72,,",
    "E4,P4,2021-01-02,no,901,,<b>",
    "E4,P4,2021-01-02,no,901,,<b>",
    "E5,P5,never,no,80,,",
    "E6,ragged",
]


@pytest.fixture
def small(tmp_path: Path) -> Path:
    """A table with one of each."""
    source = tmp_path / "rounds.csv"
    source.write_text("\n".join(["exam,pid,day,murmur,rate,s4,<i>remark", *ROWS]), encoding="utf-8")
    return source


def table(out: Path, name: str) -> list[Any]:
    """The rows of one section."""
    rows: list[Any] = json.loads((out / "report.json").read_bytes())["sections"][name]["rows"]
    return rows


def test_every_section_by_hand(wish: Wish, small: Path, backfill: Backfill) -> None:
    out, _ = backfill(wish, small)
    assert [row[1] for row in table(out, "records")] == [4, 2, 1, 7]
    assert dict(table(out, "years"))["2020"] == 2
    murmur = next(row for row in table(out, "findings") if row[1] == "murmur")
    assert murmur[2] == 1
    assert ["<i>remark", 6] in table(out, "unread")
    assert ["murmur", 1] in table(out, "unknown")
    assert any(row[0] == "exam-implausible-value" for row in table(out, "implausible"))
    assert table(out, "repeats")[0][1] == 1
    assert [row[0] for row in table(out, "tiers")] == [
        "U: urgent phrase", "T1: asked at entry, may interrupt", "T2: in the margin", "T3: detail panel only",
        "most rules are not for them",
    ]  # fmt: skip


def test_alerts_are_a_rate_of_what_was_held_against_the_rules(wish: Wish) -> None:
    tally = Tally()
    tally.reviewed[()] = 400
    tally.tiers["T1",] = 10
    tally.rules["T1", "s4.in-atrial-fibrillation"] = 6
    told = report(tally, wish).as_dict()["sections"]
    assert ("T1: asked at entry, may interrupt", 10, 25.0) in told["tiers"]["rows"]
    assert told["rules"]["rows"] == (("s4.in-atrial-fibrillation", "T1", 6, 15.0),)


def test_an_examination_that_contradicts_itself_is_counted(
    wish: Wish, backfill: Backfill, tmp_path: Path
) -> None:
    source = tmp_path / "rounds.csv"
    rows = [
        f"E{n},P{n},2020-01-01,yes,70,{s4},{rhythm}"
        for n, (s4, rhythm) in enumerate([("yes", "AF"), ("no", "AF")])
    ]
    source.write_text("\n".join(["exam,pid,day,murmur,rate,s4,rhythm", *rows]))
    line = b"  - finding: rhythm.diagnosis\n    field: rhythm\n    choice: {AF: atrial-fibrillation}\n"
    out, tally = backfill(replace(wish, map_text=wish.map_text + line), source)
    assert tally.reviewed[()] == 2
    raised = {rule: count for (_, rule), count in tally.rules.items()}
    assert raised["s4.in-atrial-fibrillation"] == 1
    assert next(row for row in table(out, "rules") if row[0] == "s4.in-atrial-fibrillation")[3] == 500.0
    _, none = backfill(replace(wish, review_each=0), source, name="none")
    assert none.reviewed[()] == 0


def test_nothing_that_a_record_holds_is_told(wish: Wish, small: Path, backfill: Backfill) -> None:
    out, _ = backfill(wish, small)
    for name in ("report.txt", "report.json", "report.html", "errors.csv", "manifest.json"):
        text = (out / name).read_text(encoding="utf-8")
        for value in ("secret wording", "901", "P4", "E4", "never"):
            assert value not in text, name


def test_unknown_wordings_are_told_when_asked_for(wish: Wish, small: Path, backfill: Backfill) -> None:
    out, _ = backfill(replace(wish, wordings=True), small)
    assert ["murmur", "secret wording", 1] in table(out, "wordings")


class Page(HTMLParser):
    """Gathers elements and addresses of a page."""

    def __init__(self) -> None:
        super().__init__()
        self.names: list[str] = []
        self.addresses: list[str] = []

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.names.append(tag)
        self.addresses += [value or "" for name, value in attrs if name in ("src", "href", "action")]


def test_the_page_needs_nothing_else_and_escapes_names(wish: Wish, small: Path, backfill: Backfill) -> None:
    out, _ = backfill(wish, small)
    text = (out / "report.html").read_text(encoding="utf-8")
    page = Page()
    page.feed(text)
    assert not page.addresses
    assert not {"script", "i", "b", "img", "link", "iframe"} & set(page.names)
    assert "&lt;i&gt;remark" in text
    assert page.names.count("svg") >= 3


def test_hostile_names_do_not_grow_the_counts_without_end() -> None:
    tally = Tally()
    for number in range(3):
        other = Tally()
        other.unread.update({(f"field {number} {n}",): 1 for n in range(MOST_KINDS)})
        tally.merge(other)
    assert len(tally.unread) == MOST_KINDS + 1
    assert tally.unread[OTHERS,] == 2 * MOST_KINDS
    assert tally.unread.total() == 3 * MOST_KINDS


def test_counts_come_back_as_they_were_written(wish: Wish, small: Path, backfill: Backfill) -> None:
    _, tally = backfill(wish, small)
    assert Tally.read(tally.as_dict()) == tally


def test_patients_that_the_rules_are_not_for_are_told(
    shared: Path, root: Path, wish: Wish, backfill: Backfill, tmp_path: Path
) -> None:
    """The first of that table are children (CirCor DigiScope 2022)."""
    map_ = root / "examples" / "informatician" / "circor-2022.yaml"
    text = (shared / "data" / "circor-2022" / "training_data.csv").read_bytes().splitlines(keepends=True)
    source = tmp_path / "children.csv"
    source.write_bytes(b"".join(text[:41]))
    _, tally = backfill(replace(wish, map_text=map_.read_bytes()), source)
    assert tally.reviewed[()] == 40
    assert tally.tiers["outside",] == 40
