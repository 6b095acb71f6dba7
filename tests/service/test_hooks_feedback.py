"""CDS Hooks 2.0.1, feedback: each test is named after the requirement it holds."""

from __future__ import annotations

import logging
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from typing import Any

import pytest
from sqlalchemy import create_engine, select
from starlette.testclient import TestClient

from fhirgallop.storage.tables import hook_feedback

Json = dict[str, Any]
Make = Callable[..., Json]
VIEW = "/cds-services/exam-review-patient-view"
FEEDBACK = f"{VIEW}/feedback"
ANSWERS = "https://fhirgallop.org/fhir/CodeSystem/card-answer"
AT = "2026-03-14T09:05:00Z"


@pytest.fixture
def card(hooked: TestClient, hook_call: Make) -> Json:
    """The card of the example, as it was given out."""
    found: Json = hooked.post(VIEW, json=hook_call()).json()["cards"][0]
    return found


@pytest.fixture
def report(card: Json) -> Callable[..., Json]:
    """A report about it: `report(code="both-true")`."""

    def make(code: str = "", **changed: Any) -> Json:
        found = {"card": card["uuid"], "outcome": "overridden", "outcomeTimestamp": AT}
        if code:
            found["overrideReason"] = {"reason": {"code": code, "system": ANSWERS}}
        return {**found, **changed}

    return make


def send(client: TestClient, *reports: Any) -> int:
    return client.post(FEEDBACK, json={"feedback": list(reports)}).status_code


def rows(tmp_path: Any) -> list[Any]:
    engine = create_engine(f"sqlite:///{tmp_path / 'hooks.sqlite3'}")
    with engine.connect() as connection:
        found = connection.execute(select(hook_feedback).order_by(hook_feedback.c.id)).all()
    engine.dispose()
    return list(found)


def test_ch_58_feedback_is_an_object_with_an_array(hooked: TestClient, report: Make) -> None:
    assert send(hooked, report()) == 200
    for body in ([report()], report(), {"feedback": report()}, {"feedback": []}, {}, "x"):
        assert hooked.post(FEEDBACK, json=body).status_code == 400
    assert hooked.post("/cds-services/none/feedback", json={"feedback": [report()]}).status_code == 404


def test_ch_59_accepted_names_its_suggestions(hooked: TestClient, card: Json, report: Make) -> None:
    accepted = report(outcome="accepted", acceptedSuggestions=[{"id": card["suggestions"][0]["uuid"]}])
    assert send(hooked, accepted) == 200
    for wrong in (None, [], [{}], [{"id": "x"}], {"id": card["suggestions"][0]["uuid"]}):
        assert send(hooked, {**accepted, "acceptedSuggestions": wrong}) == 400


@pytest.mark.parametrize(
    "changed",
    [
        {"card": None},
        {"card": "x"},
        {"outcome": "ignored"},
        {"outcome": None},
        {"outcomeTimestamp": "2026-03-14 09:05:00 UTC"},
        {"outcomeTimestamp": "2026-03-14T09:05:00+01:00"},
        {"outcomeTimestamp": "2026-02-30T09:05:00Z"},
        {"outcomeTimestamp": None},
        {"overrideReason": {}},
        {"overrideReason": "x"},
        {"overrideReason": {"reason": {"code": "a"}}},
        {"overrideReason": {"reason": {"system": ANSWERS}, "userComment": "x"}},
        {"overrideReason": {"userComment": 5}},
        {"overrideReason": {"userComment": "x" * 5000}},
    ],
)
def test_ch_59_what_a_report_must_hold(
    hooked: TestClient, report: Make, changed: Json, tmp_path: Any
) -> None:
    answer = hooked.post(FEEDBACK, json={"feedback": [report(), report(**changed)]})
    assert answer.status_code == 400
    assert answer.json()["resourceType"] == "OperationOutcome"
    assert "feedback[1]" in answer.json()["issue"][0]["diagnostics"]
    assert rows(tmp_path) == [], "all of them or none"


@pytest.mark.parametrize(
    "reason",
    [
        {"userComment": "seen"},
        {"reason": {"code": "other", "system": "https://elsewhere.example"}},
        {"reason": {"code": "both-true", "system": ANSWERS}, "userComment": "seen"},
    ],
)
def test_ch_59_reason_or_comment_or_both(hooked: TestClient, report: Make, reason: Json) -> None:
    assert send(hooked, report(overrideReason=reason)) == 200


def test_ch_60_several_reports_and_repeated_ones(hooked: TestClient, report: Make, tmp_path: Any) -> None:
    later = report(outcomeTimestamp="2026-03-14T09:06:00Z")
    assert send(hooked, report(), later) == 200
    assert [row.at for row in rows(tmp_path)] == [AT, "2026-03-14T09:06:00Z"]
    assert send(hooked, report(), later) == 200, "the same again"
    assert send(hooked, report(), report()) == 200
    assert len(rows(tmp_path)) == 2
    assert send(hooked, report("both-true")) == 200
    assert len(rows(tmp_path)) == 3, "another report about the same card is added"


def test_ch_60_the_same_report_from_many_sides(hooked: TestClient, report: Make, tmp_path: Any) -> None:
    body = report("true-in-this-patient")
    with ThreadPoolExecutor(4) as pool:
        statuses = list(pool.map(lambda _: send(hooked, body), range(8)))
    assert set(statuses) == {200}
    assert len(rows(tmp_path)) == 1


def test_ch_61_a_card_nobody_knows_is_recorded_as_such(hooked: TestClient, tmp_path: Any) -> None:
    unknown = {
        "card": "11111111-2222-4333-8444-555555555555",
        "outcome": "overridden",
        "outcomeTimestamp": AT,
    }
    assert send(hooked, unknown) == 200
    assert [row.matched for row in rows(tmp_path)] == [False]
    assert hooked.get("/cds-feedback").json() == {"rules": [], "unmatched": 1}


def test_ch_61_a_card_of_another_service_is_not_matched(
    hooked: TestClient, report: Make, tmp_path: Any
) -> None:
    address = "/cds-services/exam-review-draft/feedback"
    assert hooked.post(address, json={"feedback": [report("both-true")]}).status_code == 200
    assert [row.matched for row in rows(tmp_path)] == [False]
    assert hooked.get("/cds-feedback").json()["unmatched"] == 1


def test_ch_62_silence_says_nothing(hooked: TestClient, card: Json) -> None:
    assert card["uuid"]
    assert hooked.get("/cds-feedback").json() == {"rules": [], "unmatched": 0}


def test_ch_63_a_comment_is_kept_and_never_logged_or_told(
    hooked: TestClient, report: Make, tmp_path: Any, caplog: pytest.LogCaptureFixture
) -> None:
    caplog.set_level(logging.DEBUG, logger="fhirgallop")
    words = "Mrs Secretperson has a known block"
    assert send(hooked, report(overrideReason={"userComment": words})) == 200
    wrong = report(overrideReason={"userComment": words, "reason": {"code": words}})
    refused = hooked.post(FEEDBACK, json={"feedback": [wrong]})
    assert refused.status_code == 400
    assert "Secretperson" not in caplog.text + refused.text + hooked.get("/cds-feedback").text
    assert [row.comment for row in rows(tmp_path)] == [words]


def test_feedback_is_counted_by_rule(hooked: TestClient, card: Json, report: Make) -> None:
    first = report(outcome="accepted", acceptedSuggestions=[{"id": card["suggestions"][0]["uuid"]}])
    assert send(hooked, first, report("both-true"), report("looked-again")) == 200
    counted = {one.pop("rule"): one for one in hooked.get("/cds-feedback").json()["rules"]}
    expected = {"accepted": 1, "overridden": 2, "both-true": 1, "looked-again": 1}
    assert counted == {"pulse.regular-in-fibrillation": expected, "s4.in-atrial-fibrillation": expected}


def test_an_answer_holds_for_every_user_of_the_encounter(
    hooked: TestClient, hook_call: Make, report: Make
) -> None:
    other = {"userId": "Practitioner/8"}
    assert send(hooked, report()) == 200
    first = hook_call(context=other)
    assert hooked.post(VIEW, json=first).json()["cards"], "an override without a reason answers nothing"
    assert send(hooked, report("both-true")) == 200
    assert hooked.post(VIEW, json=hook_call(context={"userId": "Practitioner/9"})).json() == {"cards": []}
    assert hooked.post(VIEW, json=first).json()["cards"], "the same hookInstance is answered alike"


def test_an_urgent_card_each_user_answers_alone(hooked: TestClient, hook_call: Make, prefetch: Make) -> None:
    said = prefetch("urgent-combination")
    (urgent,) = hooked.post(VIEW, json=hook_call(prefetch=said)).json()["cards"]
    for code in ("looked-again", "true-in-this-patient"):
        reason = {"reason": {"code": code, "system": ANSWERS}}
        answer = {"card": urgent["uuid"], "outcome": "overridden", "outcomeTimestamp": AT}
        assert send(hooked, {**answer, "overrideReason": reason}) == 200
    other = hook_call(prefetch=said, context={"userId": "Practitioner/8"})
    assert hooked.post(VIEW, json=other).json()["cards"][0]["summary"] == "urgent clinical review"


@pytest.mark.parametrize(("code", "count"), [("looked-again", 1), ("true-in-this-patient", 0)])
def test_only_what_is_true_in_the_patient_is_silent_in_another_encounter(
    hooked: TestClient, hook_call: Make, report: Make, prefetch: Make, kept: list[Json], searchset: Any,
    code: str, count: int,
) -> None:  # fmt: skip
    assert send(hooked, report(code)) == 200
    found = prefetch(exam=searchset(kept))
    for one in (*kept, *(entry["resource"] for entry in found["results"]["entry"])):
        one["encounter"] = {"reference": "Encounter/v-9999"}
    call = hook_call(prefetch=found, context={"encounterId": "v-9999", "userId": "Practitioner/8"})
    assert len(hooked.post(VIEW, json=call).json()["cards"]) == count


def test_many_calls_for_one_patient_at_once(hooked: TestClient, hook_call: Make) -> None:
    """Each user sees the card once, whoever comes first."""
    calls = [hook_call(context={"userId": f"Practitioner/{n % 4}"}) for n in range(12)]
    with ThreadPoolExecutor(6) as pool:
        found = list(pool.map(lambda call: hooked.post(VIEW, json=call), calls))
    shown = [n % 4 for n, answer in enumerate(found) if answer.status_code == 200 and answer.json()["cards"]]
    assert {answer.status_code for answer in found} <= {200, 503}
    assert sorted(set(shown)) == sorted(shown)
    assert set(shown) == {0, 1, 2, 3} or any(answer.status_code == 503 for answer in found)
