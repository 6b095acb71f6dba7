"""The rules as pages, and how they fared: raised and shown in calls, answered, by month."""

from __future__ import annotations

import re
from datetime import UTC, datetime
from html import unescape
from typing import Any

import pytest
from starlette.testclient import TestClient

from fhirgallop.cards.build import ANSWER_SYSTEM
from fhirgallop.codes import fhirjson
from fhirgallop.reasoning import rulebook
from fhirgallop.service.views.knowledge import TIERS, Fared, fares, found, last_months
from fhirgallop.service.views.months import months
from fhirgallop.storage.engine import open_database
from fhirgallop.storage.rule_counts import AnswerMonth, RuleCounts, RuleMonth


def test_every_rule_has_a_page_with_mechanism_source_and_strength(client: TestClient) -> None:
    for rule in rulebook.load().rules.values():
        page = unescape(client.get(f"/knowledge/{rule.id}").text)
        assert f"<h1>{rule.mechanism}</h1>" in page, rule.id
        assert rule.source in page, rule.id
        assert f'<span class="tag">{rule.strength.value}</span>' in page, rule.id


def test_the_list_leads_to_every_rule(client: TestClient) -> None:
    seen: list[str] = []
    address = "/knowledge"
    while address:
        page = client.get(address).text
        seen += re.findall(r'class="rule-line"><a href="/knowledge/([^"]+)"', page)
        further = re.search(r'href="(/knowledge\?[^"]*from[^"]*)"', page)
        address = unescape(further[1]) if further else ""
    assert sorted(seen) == sorted(rulebook.load().rules)


def test_search_wants_every_word_and_narrows_by_how_a_rule_is_shown() -> None:
    book = rulebook.load()
    ids = [one.id for one in found(book, "fourth SOUND fibrillation", "")]
    assert "s4.in-atrial-fibrillation" in ids
    assert len(ids) < len(book.rules)
    urgent = list(found(book, "", "urgent"))
    assert {one.tier for one in urgent} == {"urgent"}
    assert list(found(book, "no rule says flabbergasting", "")) == []
    assert sum(len(list(found(book, "", name))) for name in TIERS.values()) == len(book.rules)


def test_a_rule_that_is_not_there_is_a_page_that_says_so(client: TestClient) -> None:
    answer = client.get("/knowledge/no.such", headers={"Accept": "text/html"})
    assert answer.status_code == 404
    assert "There is no rule of that name." in answer.text


def test_the_last_twelve_months_over_a_turn_of_the_year() -> None:
    span = last_months(datetime(2027, 2, 28, tzinfo=UTC))
    assert (span[0], span[-2], span[-1], len(span)) == ("2026-03", "2027-01", "2027-02", 12)
    assert last_months(datetime(2026, 12, 1, tzinfo=UTC))[0] == "2026-01"


def test_counts_come_together_by_rule_and_month() -> None:
    card = fhirjson.write({"rules": ["a", "b"]})
    fared = fares(
        ["2026-11", "2026-12"],
        [RuleMonth("2026-12", "a", "shown", 3), RuleMonth("2026-12", "a", "folded", 2)],
        [
            AnswerMonth("2026-12", card, "overridden", "both-true", ANSWER_SYSTEM, 2),
            AnswerMonth("2026-12", card, "overridden", "x", "urn:site", 1),
            AnswerMonth("2026-11", card, "accepted", "", "", 4),
        ],
    )
    total = fared.total("a")
    assert (total.raised, total.shown, total.accepted, total.overridden) == (5, 3, 4, 3)
    assert total.reasons == {"Both entries are true today": 2, "a reason of the site": 1}
    assert [(month, one.raised) for month, one in fared.of("a")] == [("2026-11", 0), ("2026-12", 5)]
    assert [one.overridden for _, one in fared.all()] == [0, 6]


@pytest.mark.parametrize("most", [1, 4, 7, 99, 12345])
def test_the_scale_of_the_drawing_holds_every_bar_in_few_lines(most: int) -> None:
    drawn = months([("2026-12", Fared(raised=most, shown=most // 2))], "x")
    heights = [float(one) for one in re.findall(r'height="([\d.]+)" class="count', drawn)][3:]
    assert max(heights, default=0.0) <= 140
    assert 2 <= drawn.count('class="scale"') <= 6


def test_where_nothing_was_counted_there_is_no_empty_drawing(client: TestClient) -> None:
    assert months([("2026-11", Fared()), ("2026-12", Fared())], "x") == ""
    assert "Nothing was raised or answered" in client.get("/knowledge").text


def test_counts_are_added_up_and_kept_by_month(tmp_path: Any) -> None:
    engine = open_database(f"sqlite:///{tmp_path / 'counts.sqlite3'}")
    counts = RuleCounts(engine)
    assert counts.add("2026-11", {("a", "shown"): 1})
    assert counts.add("2026-12", {("a", "shown"): 2, ("b", "folded"): 1})
    assert counts.add("2026-12", {("a", "shown"): 5})
    assert [(one.month, one.rule, one.count) for one in counts.raised("2026-12")] == [
        ("2026-12", "a", 7), ("2026-12", "b", 1),
    ]  # fmt: skip
    engine.dispose()


def test_a_call_is_counted_on_the_page_of_its_rule(hooked: TestClient, hook_call: Any, prefetch: Any) -> None:
    call = hook_call("patient-view", prefetch=prefetch("atrial-fibrillation-today"))
    answer = hooked.post("/cds-services/exam-review-patient-view", json=call)
    assert answer.status_code == 200, answer.text
    shown = {link["url"].rpartition("/")[2] for card in answer.json()["cards"] for link in card["links"]}
    assert shown
    for rule in shown:
        page = hooked.get(f"/knowledge/{rule}").text
        assert re.search(
            r'<th scope="row">2026-03</th><td class="number">1</td><td class="number">1</td>', page
        )
