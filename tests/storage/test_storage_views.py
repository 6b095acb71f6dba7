"""What the pages read: lists and versions of examinations, counts of rules, reports; on both databases."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from pathlib import Path

import pytest
from sqlalchemy import Engine

from fhirgallop.storage.engine import open_database
from fhirgallop.storage.exam_search import ExamSearch
from fhirgallop.storage.hooks import HookStore, KeptCard, KeptFeedback
from fhirgallop.storage.rule_counts import RuleCounts
from fhirgallop.storage.submissions import Submission, Submissions


@pytest.fixture(params=["sqlite", "postgresql"])
def engine(request: pytest.FixtureRequest, tmp_path: Path) -> Iterator[Engine]:
    """A fresh database of each kind."""
    address = f"sqlite:///{tmp_path / 'views.sqlite3'}"
    if request.param == "postgresql":
        address = request.getfixturevalue("postgres")
    opened = open_database(address)
    yield opened
    opened.dispose()


@pytest.fixture
def kept(engine: Engine) -> Callable[..., None]:
    """Keeps a version of an examination."""

    def keep(exam: str, version: int, *, patient: str = "p", number: str = "n", edition: str = "R4") -> None:
        row = Submission(
            exam, edition, True, version, "map", "1", f"{exam}{version}", patient, "2026-12-01T08:00:00Z",
            b"{}", number,
        )  # fmt: skip
        assert Submissions(engine).add(row)

    return keep


def test_of_each_examination_the_last_version_the_latest_first(
    engine: Engine, kept: Callable[..., None]
) -> None:
    kept("a", 1)
    kept("b", 1, patient="q")
    kept("a", 2)
    kept("c", 1, number="m")
    search = ExamSearch(engine)
    found = search.newest(limit=10)
    assert [(one.exam, one.version) for one in found] == [("c", 1), ("a", 2), ("b", 1)]
    assert [one.exam for one in search.newest(limit=2)] == ["c", "a"]
    assert [one.exam for one in search.newest(limit=2, before=found[1].id)] == ["b"]
    assert [one.exam for one in search.newest(limit=9, patient="q")] == ["b"]
    assert [one.exam for one in search.newest(limit=9, number="n")] == ["a", "b"]
    assert search.newest(limit=9, patient="q", number="m") == []


def test_versions_in_every_edition_and_no_row_of_another_examination(
    engine: Engine, kept: Callable[..., None]
) -> None:
    kept("a", 1)
    kept("a", 1, edition="R5")
    kept("b", 1)
    search = ExamSearch(engine)
    versions = search.versions("a")
    assert [(one.edition, one.version) for one in versions] == [("R5", 1), ("R4", 1)]
    found = search.version("a", versions[0].id)
    assert found is not None
    assert found.edition == "R5"
    assert search.version("b", versions[0].id) is None


def test_counts_of_a_month_add_up(engine: Engine) -> None:
    counts = RuleCounts(engine)
    assert counts.add("2026-12", {("r", "shown"): 2, ("r", "folded"): 1})
    assert counts.add("2026-12", {("r", "shown"): 3})
    found = {(one.rule, one.fate): one.count for one in counts.raised("2026-12")}
    assert found == {("r", "shown"): 5, ("r", "folded"): 1}
    assert counts.raised("2027-01") == []


def test_reports_are_found_by_card_and_counted_by_month(engine: Engine) -> None:
    store = HookStore(engine)
    card = KeptCard("c" * 36, "s", "p", "e", b"{}", "2026-12-01T08:00:00Z")
    assert store.keep_cards([card])
    assert store.keep_cards([card])
    for number, at in enumerate(("2026-11-30T08:00:00Z", "2026-12-01T08:00:00Z", "2026-12-02T08:00:00Z")):
        report = KeptFeedback(
            f"k{number}", "s", card.card, True, "overridden", b"[]", "both-true", "urn:x", "", at, at
        )
        assert store.add_feedback([report])
    assert [one.key for one in store.feedback_to([card.card])] == ["k0", "k1", "k2"]
    counted = [(one.month, one.count) for one in RuleCounts(engine).answers("2026-12")]
    assert counted == [("2026-12", 2)]
