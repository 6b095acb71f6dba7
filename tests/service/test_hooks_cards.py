"""CDS Hooks 2.0.1, what we answer: each test is named after the requirement it holds."""

from __future__ import annotations

import json
import logging
import re
import sqlite3
from collections.abc import Callable, Iterator
from contextlib import closing
from typing import Any

import pytest
from markdown_it import MarkdownIt
from starlette.testclient import TestClient

from fhirgallop.conformance.validator import validate
from fhirgallop.reasoning.rulebook import load
from fhirgallop.reasoning.vocabulary import Tier

Json = dict[str, Any]
Make = Callable[..., Json]
VIEW = "/cds-services/exam-review-patient-view"
DISCHARGE = "/cds-services/exam-review-encounter-discharge"
DRAFT = "/cds-services/exam-review-draft"
CHARTS = (
    "atrial-fibrillation-history",
    "atrial-fibrillation-today",
    "mitral-stenosis-known-area",
    "sinus-rhythm-stiff-ventricle",
    "urgent-combination",
)


@pytest.fixture
def responses(hooked: TestClient, hook_call: Make, prefetch: Make) -> list[Json]:
    """One answer for each example chart, one without a rhythm, one with much unknown; each another user's."""
    found = [prefetch(name) for name in CHARTS]
    found.append(prefetch(results=None, conditions=None))
    found.append({key: value for key, value in prefetch().items() if key in ("patient", "exam", "results")})
    answers = [
        hooked.post(VIEW, json=hook_call(prefetch=one, context={"userId": f"Practitioner/{n}"}))
        for n, one in enumerate(found)
    ]
    assert {answer.status_code for answer in answers} == {200}
    return [answer.json() for answer in answers]


@pytest.fixture
def cards(responses: list[Json]) -> list[Json]:
    """Every card of these answers."""
    found = [card for response in responses for card in response["cards"]]
    assert {card["indicator"] for card in found} == {"info", "warning"}
    assert any("suggestions" in card for card in found)
    assert any(card["summary"] == "urgent clinical review" for card in found)
    return found


def empties(value: Any, path: str = "") -> Iterator[str]:
    """Where null, "", [] or {} stands."""
    if value is None or value in ("", [], {}):
        yield path
    elif isinstance(value, dict):
        for name, one in value.items():
            yield from empties(one, f"{path}.{name}")
    elif isinstance(value, list):
        for index, one in enumerate(value):
            yield from empties(one, f"{path}[{index}]")


def members(value: Any) -> Iterator[str]:
    """Every member name, however deep."""
    if isinstance(value, dict):
        for name, one in value.items():
            yield name
            yield from members(one)
    elif isinstance(value, list):
        for one in value:
            yield from members(one)


def suggestions(cards: list[Json]) -> list[Json]:
    return [one for card in cards for one in card.get("suggestions", ())]


def test_ch_2_nothing_empty_is_emitted(hooked: TestClient, responses: list[Json]) -> None:
    for response in (*responses, hooked.get("/cds-services").json()):
        assert [path for path in empties(response) if path != ".cards"] == []


def test_ch_3_optional_members_without_a_value_are_left_out(hooked_with: Any, hook_call: Make) -> None:
    plain = hooked_with(pages="")
    (card,) = plain.post(VIEW, json=hook_call(context={"encounterId": None})).json()["cards"]
    assert "links" not in card
    assert "url" not in card["source"]
    assert all("encounter" not in one["actions"][0]["resource"] for one in card["suggestions"])


def test_ch_40_cards_is_always_a_list(responses: list[Json]) -> None:
    assert all(isinstance(response["cards"], list) for response in responses)
    assert {"cards": []} in responses, "an answer may be empty"


def test_ch_41_the_summary_is_one_short_sentence(cards: list[Json]) -> None:
    for card in cards:
        assert 0 < len(card["summary"]) < 140
        assert not re.search(r"[.?!]\s", card["summary"])


def test_ch_41_every_rule_and_family_has_a_summary_that_fits() -> None:
    """Over all rules that may make a card, not only those of the examples."""
    from fhirgallop.cards.build import MAX_SUMMARY, summary  # noqa: PLC0415

    book = load()
    loud = [rule for rule in book.rules.values() if rule.tier in (Tier.T1, Tier.T2)]
    assert len(loud) > 50
    for rule in loud:
        family = book.families.get(rule.family)
        question, title = (family.question, family.title) if family else ("", "Title")
        found = summary(title, question, rule.wording or rule.mechanism)
        assert 0 < len(found) <= MAX_SUMMARY
        assert "…" not in found


def test_ch_42_indicators(cards: list[Json]) -> None:
    assert {card["indicator"] for card in cards} <= {"info", "warning", "critical"}


def test_ch_43_the_source(cards: list[Json]) -> None:
    for card in cards:
        source = card["source"]
        assert source["label"]
        assert source["url"].startswith("http://localhost:8470/")
        assert {"system", "code", "display"} == set(source["topic"])


HOSTILE = (
    "<script>alert(1)</script> [x](https://evil.example) ![i](http://evil.example/i.png) `c` **b** | "
    "www.evil.example"
)


def test_ch_44_the_detail_is_markdown_without_html_or_injected_links(
    hooked: TestClient, hook_call: Make, prefetch: Make, kept: list[Json], searchset: Any
) -> None:
    """Rendered by an independent CommonMark library, with raw HTML and bare links switched on."""
    for one in kept:
        for part in one.get("component", ()):
            # the clinician's own words for a property, as POST /exams writes them
            if any(coding["code"] == "site" for coding in part["code"]["coding"]):
                part["valueCodeableConcept"] = {"text": HOSTILE}
        if any(coding["code"] == "heart-sound.s4" for coding in one["code"]["coding"]):
            one["component"] = [
                {**part, "valueCodeableConcept": {"text": HOSTILE}} for part in one["component"]
            ]
    answer = hooked.post(VIEW, json=hook_call(prefetch=prefetch(exam=searchset(kept))))
    (card,) = answer.json()["cards"]
    assert "evil.example" in card["detail"], "the words are shown, as words"
    page = MarkdownIt("gfm-like", {"html": True, "linkify": False}).render(card["detail"])
    assert "&lt;script&gt;alert(1)&lt;/script&gt;" in page
    assert set(re.findall(r"<(\w+)", page)) <= {"p", "ul", "li", "strong"}
    # a renderer that makes links of bare addresses finds none
    assert not re.search(r"https?://|www\.", card["detail"])


def test_ch_44_no_html_in_any_detail(cards: list[Json]) -> None:
    for card in cards:
        page = MarkdownIt("commonmark", {"html": True}).render(card["detail"])
        assert set(re.findall(r"<(\w+)", page)) <= {"p", "ul", "li", "strong"}


def test_ch_45_a_uuid_that_is_stable_for_the_hook_instance(
    hooked: TestClient, hook_call: Make, cards: list[Json]
) -> None:
    ids = [card["uuid"] for card in cards]
    assert len(set(ids)) == len(ids)
    call = hook_call(context={"userId": "Practitioner/99"})
    first, again = (hooked.post(VIEW, json=call).json()["cards"] for _ in range(2))
    assert [card["uuid"] for card in first] == [card["uuid"] for card in again] != []


def test_ch_46_suggestions_come_with_a_selection_behaviour(cards: list[Json]) -> None:
    for card in cards:
        assert ("suggestions" in card) == ("selectionBehavior" in card)
        assert card.get("selectionBehavior", "any") in ("at-most-one", "any")


def test_ch_47_no_more_than_one_recommended(cards: list[Json]) -> None:
    for card in cards:
        if card.get("selectionBehavior") == "at-most-one":
            assert sum(one.get("isRecommended", False) for one in card["suggestions"]) <= 1
    assert "isRecommended" not in set(members(cards)), "no suggestion is better than another"


def test_ch_48_a_suggestion_has_label_and_uuid(cards: list[Json]) -> None:
    found = suggestions(cards)
    assert len({one["uuid"] for one in found}) == len(found) >= 2
    assert all(one["label"] and one["actions"] for one in found)


def test_ch_49_an_action_creates_a_whole_resource(cards: list[Json]) -> None:
    for one in suggestions(cards):
        for action in one["actions"]:
            assert action["type"] == "create", "nothing is updated or deleted: no finding is ever edited"
            assert action["description"]
            assert isinstance(action["resource"], dict)
            assert action["resource"]["resourceType"] == "Task"


@pytest.mark.parametrize("edition", ["R4", "R4B", "R5"])
def test_ch_50_resources_in_actions_are_valid_and_have_an_id(cards: list[Json], edition: Any) -> None:
    for one in suggestions(cards):
        resource = one["actions"][0]["resource"]
        assert resource["id"]
        assert [str(issue) for issue in validate(resource, edition) if issue.is_error] == []


def test_ch_50_the_marked_entry_is_the_one_on_the_server(cards: list[Json], kept: list[Json]) -> None:
    named = {f"Observation/{one['id']}": one for one in kept}
    marks = [one for one in suggestions(cards) if one["label"].startswith("Mark for another look")]
    assert marks
    for one in marks:
        observation = named[one["actions"][0]["resource"]["focus"]["reference"]]
        assert one["label"].endswith(observation["code"]["text"])


def test_ch_51_override_reasons_have_code_system_display(cards: list[Json]) -> None:
    for card in cards:
        for reason in card.get("overrideReasons", ()):
            assert all(reason[name] for name in ("code", "system", "display"))
    assert {r["code"] for c in cards for r in c.get("overrideReasons", ())} == {
        "looked-again", "will-correct", "both-true", "true-in-this-patient",
    }  # fmt: skip


def test_ch_52_links_have_label_url_type(cards: list[Json]) -> None:
    links = [link for card in cards for link in card.get("links", ())]
    assert links
    for link in links:
        assert set(link) == {"label", "url", "type"}
        assert link["type"] == "absolute"


def test_ch_53_54_55_nothing_of_drafts_system_actions_or_the_next_edition(responses: list[Json]) -> None:
    assert not {"autolaunchable", "systemActions", "actionSelectionBehavior"} & set(members(responses))


def test_ch_56_a_contradiction_is_a_question_and_a_warning(cards: list[Json]) -> None:
    (card,) = [one for one in cards if "atria to contract" in one["source"]["topic"]["display"]][:1]
    assert card["indicator"] == "warning"
    assert card["summary"].endswith("?")
    for evidence in ("Fourth heart sound", "ECG, 20 minutes before", "Observation/ecg-today"):
        assert evidence in card["detail"]


def test_ch_56_critical_only_where_it_was_configured(
    hooked_with: Any, hook_call: Make, prefetch: Make
) -> None:
    call = hook_call(prefetch=prefetch("urgent-combination"))
    (card,) = hooked_with(cards_critical=True).post(VIEW, json=call).json()["cards"]
    assert card["indicator"] == "critical"


def test_an_urgent_card_names_entries_only(cards: list[Json]) -> None:
    (card,) = [one for one in cards if one["source"]["topic"]["code"] == "urgent"]
    assert card["summary"] == "urgent clinical review"
    assert not {"suggestions", "links"} & set(card)
    for rule in load().rules.values():
        if rule.tier is Tier.U:
            assert rule.mechanism not in card["detail"]
            assert rule.id not in json.dumps(card)


def test_ch_57_the_same_facts_give_the_same_cards(
    hooked: TestClient, hook_call: Make, prefetch: Make
) -> None:
    """Whatever the order of resources and keys."""
    instance = "5b6d2c80-5a2f-4f0c-9d6c-0f6a3f1f3b01"
    call = hook_call(hookInstance=instance)
    turned = {key: call["prefetch"][key] for key in reversed(call["prefetch"])}
    for key, value in turned.items():
        if isinstance(value, dict) and value.get("resourceType") == "Bundle":
            turned[key] = {**value, "entry": value["entry"][::-1]}
    first = hooked.post(VIEW, json=call).json()["cards"]
    again = hooked.post(VIEW, json={**call, "prefetch": turned}).json()["cards"]
    assert first == again != []


def test_ch_57_loudest_first(responses: list[Json]) -> None:
    order = ("critical", "warning", "info")
    for response in responses:
        ranks = [order.index(card["indicator"]) for card in response["cards"]]
        assert ranks == sorted(ranks)


def test_ch_26_three_hooks_one_engine(
    hooked: TestClient, hook_call: Make, prefetch: Make, kept: list[Json], searchset: Any
) -> None:
    """The same facts at three moments, for three users: the same card but for its ids."""
    draft = hook_call("org.fhirgallop.exam-draft", prefetch=prefetch(exam=None))
    draft["context"] |= {"userId": "Practitioner/3", "draftObservations": searchset(kept)}
    calls = {
        VIEW: hook_call(context={"userId": "Practitioner/1"}),
        DISCHARGE: hook_call("encounter-discharge", context={"userId": "Practitioner/2"}),
        DRAFT: draft,
    }
    found = [hooked.post(address, json=call).json()["cards"] for address, call in calls.items()]
    shown = [[{k: v for k, v in c.items() if k not in ("uuid", "suggestions")} for c in one] for one in found]
    assert shown[0] == shown[1] == shown[2] != []
    assert [[s["label"] for s in suggestions(one)] for one in found] == [
        ["Mark for another look: Fourth heart sound"]
    ] * 3


def test_ch_75_links_lead_only_to_configured_hosts(hooked: TestClient, cards: list[Json]) -> None:
    text = json.dumps(cards)
    assert set(re.findall(r"https?://([^/\"\\ ]+)", text)) == {"localhost:8470", "fhirgallop.org"}
    for card in cards:
        systems = {card["source"]["topic"]["system"], *(r["system"] for r in card.get("overrideReasons", ()))}
        assert all(one.startswith("https://fhirgallop.org/fhir/") for one in systems), "names, not links"
        for link in card.get("links", ()):
            page = hooked.get(link["url"])
            assert page.status_code == 200
            assert "| Source |" in page.text
        assert hooked.get(card["source"]["url"]).status_code == 200


@pytest.mark.parametrize(
    "pages", ["https://evil.example", "ftp://localhost", "localhost", "http://localhost/?a"]
)
def test_ch_75_no_other_host_can_be_configured(hooked_with: Any, pages: str) -> None:
    from fhirgallop.errors import SettingsError  # noqa: PLC0415

    with pytest.raises(SettingsError, match="FHIRGALLOP_PAGES"):
        hooked_with(pages=pages)


def test_ch_76_times_and_sources_stand_in_the_detail(cards: list[Json]) -> None:
    for card in cards:
        if card["source"]["topic"]["code"] == "not-recorded":
            continue
        entries = (
            card["detail"].partition("Entries, examination of 2026-03-14T09:30:00")[2].partition("\n\n")[2]
        )
        lines = entries.partition("\n\n")[0].splitlines()
        assert lines
        for line in lines:
            age = re.search(
                r"this examination|(minute|hour|day|month|year)s? before|time not known|patient record", line
            )
            assert age, line


def test_ch_76_safety_texts_travel_with_every_card(cards: list[Json]) -> None:
    for card in cards:
        assert "Supports clinical judgement and does not replace it." in card["detail"]
        assert "That nothing is shown is no reassurance." in card["detail"]


def test_ch_77_no_extension_is_emitted(responses: list[Json]) -> None:
    assert "extension" not in set(members(responses))


def test_an_urgent_card_is_shown_to_every_user_once(
    hooked: TestClient, hook_call: Make, prefetch: Make
) -> None:
    said = prefetch("urgent-combination")
    for user, expected in (("1", 1), ("2", 1), ("1", 0)):
        call = hook_call(prefetch=said, context={"userId": f"Practitioner/{user}"})
        assert len(hooked.post(VIEW, json=call).json()["cards"]) == expected


def test_in_shadow_everything_is_logged_and_nothing_shown(
    hooked_with: Any, hook_call: Make, caplog: pytest.LogCaptureFixture
) -> None:
    caplog.set_level(logging.INFO)
    assert hooked_with(cards_shadow=True).post(VIEW, json=hook_call()).json() == {"cards": []}
    assert "s4.in-atrial-fibrillation=shadow" in caplog.text


def test_no_finding_and_no_name_reach_the_log_or_the_memory(
    hooked: TestClient, hook_call: Make, caplog: pytest.LogCaptureFixture, tmp_path: Any
) -> None:
    caplog.set_level(logging.INFO)
    assert hooked.post(VIEW, json=hook_call()).json()["cards"]
    with closing(sqlite3.connect(tmp_path / "hooks.sqlite3")) as database:
        tables = [name for (name,) in database.execute("SELECT name FROM sqlite_master WHERE type = 'table'")]
        # the clinic's map, which is kept too, names findings
        rows = [row for name in tables if name != "maps" for row in database.execute(f"SELECT * FROM {name}")]
    kept = repr(rows)
    assert "s4.in-atrial-fibrillation" in kept
    for secret in ("p-20417", "F-20417", "v-8812", "heart-sound.s4", "Fourth heart", "ecg-today"):
        assert secret not in caplog.text
        assert secret not in kept


def test_an_unknown_rule_has_no_page(hooked: TestClient) -> None:
    assert hooked.get("/rules/no-such-rule").status_code == 404
