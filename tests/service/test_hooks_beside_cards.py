"""Beside the cards: system actions for clients that asked for them, limits, unread parts, counts."""

from __future__ import annotations

import json
import sqlite3
from collections.abc import Callable
from contextlib import closing
from pathlib import Path
from typing import Any

import pytest
from starlette.testclient import TestClient

from fhirgallop import settings
from fhirgallop.conformance.validator import validate
from fhirgallop.errors import SettingsError
from fhirgallop.service.auth.caller import NOBODY, Caller

Json = dict[str, Any]
Make = Callable[..., Json]
VIEW = "/cds-services/exam-review-patient-view"
EHR = "https://ehr.example"
RECORD = "Record today's rhythm"


class Gate:
    """Lets in whoever is told, in place of one who looks at tokens."""

    def __init__(self, caller: Caller) -> None:
        self.caller = caller

    async def admit(self, request: Any, need: Any) -> Caller:
        return self.caller

    def close(self) -> None:
        """Nothing is open."""


@pytest.fixture
def acting(hooked_with: Callable[..., TestClient]) -> Callable[[Caller], TestClient]:
    """The service for which one client has asked for system actions, called by a client of choice."""

    def make(caller: Caller) -> TestClient:
        service = hooked_with(cds_system_actions=[EHR])
        service.app.state.gate = Gate(caller)  # type: ignore[attr-defined]
        return service

    return make


def unrecorded(prefetch: Make) -> Json:
    """Much is open until today's rhythm is known."""
    return prefetch(results=None, conditions=None)


def labels(answer: Json) -> list[str]:
    return [one["label"] for card in answer["cards"] for one in card.get("suggestions", ())]


@pytest.mark.parametrize(
    "caller", [NOBODY, Caller("cds", "https://other.example"), Caller("cds", "https://ehr.example/")]
)
def test_ch_54_nobody_else_gets_system_actions(
    acting: Any, hook_call: Make, prefetch: Make, caller: Caller
) -> None:
    answer = acting(caller).post(VIEW, json=hook_call(prefetch=unrecorded(prefetch))).json()
    assert set(answer) == {"cards"}
    assert labels(answer).count(RECORD) == 1


def test_ch_54_a_client_that_asked_gets_one_task_and_no_suggestion_of_it(
    acting: Any, hook_call: Make, prefetch: Make
) -> None:
    service = acting(Caller("cds", EHR))
    call = hook_call(prefetch=unrecorded(prefetch))
    first = service.post(VIEW, json=call)
    answer = first.json()
    (action,) = answer["systemActions"]
    assert action["type"] == "create", "nothing is ever edited"
    assert action["description"].startswith(RECORD)
    assert RECORD not in labels(answer)
    task = action["resource"]
    assert (task["resourceType"], task["intent"]) == ("Task", "proposal")
    assert task["for"] == {"reference": "Patient/p-20417"}
    assert not [i for i in validate(json.dumps(task)) if i.severity in ("error", "fatal")]
    assert service.post(VIEW, json=call).content == first.content
    again = {**call, "hookInstance": "00000000-0000-4000-8000-000000000001"}
    assert service.post(VIEW, json=again).json() == {"cards": []}, "once in an encounter"


def test_ch_54_another_look_stays_a_persons_choice(acting: Any, hook_call: Make) -> None:
    answer = acting(Caller("cds", EHR)).post(VIEW, json=hook_call()).json()
    assert "systemActions" not in answer, "today's rhythm is known"
    assert any(label.startswith("Mark for another look") for label in labels(answer))


def test_ch_54_nothing_acts_unseen(
    hooked_with: Callable[..., TestClient], hook_call: Make, prefetch: Make
) -> None:
    service = hooked_with(cds_system_actions=[EHR], cards_shadow=True)
    service.app.state.gate = Gate(Caller("cds", EHR))  # type: ignore[attr-defined]
    answer = service.post(VIEW, json=hook_call(prefetch=unrecorded(prefetch))).json()
    assert answer == {"cards": []}


def test_ch_54_a_client_without_a_name_cannot_ask() -> None:
    with pytest.raises(SettingsError, match="CDS_SYSTEM_ACTIONS"):
        settings.load(cds_system_actions=[""])


def details(service: TestClient, call: Json) -> str:
    answer = service.post(VIEW, json=call)
    assert answer.status_code == 200, answer.text
    return "\n".join(card["detail"] for card in answer.json()["cards"])


def test_a_child_is_said_to_be_outside_the_rules(hooked: TestClient, hook_call: Make, prefetch: Make) -> None:
    """Only what holds for children speaks; the card that does says that the rest was not applied."""
    heading = "Most rules are not meant for this patient and were not applied"
    grown = prefetch("urgent-combination")
    assert heading not in details(hooked, hook_call(prefetch=grown, context={"userId": "Practitioner/1"}))
    child = prefetch()
    child["patient"]["birthDate"] = "2016-05-02"
    # that atria which fibrillate give no fourth sound holds at every age
    assert heading in details(hooked, hook_call(prefetch=child, context={"userId": "Practitioner/2"}))


def test_what_could_not_be_read_is_said_in_one_line(
    hooked: TestClient, hook_call: Make, prefetch: Make, searchset: Any
) -> None:
    found = prefetch()
    tracing = found["results"]["entry"][0]["resource"]
    pressure = {
        "resourceType": "Observation", "id": "ef", "status": "final", "subject": tracing["subject"],
        "category": tracing["category"], "effectiveDateTime": tracing["effectiveDateTime"],
        "code": {"coding": [{"system": "http://loinc.org", "code": "10230-1"}]},
        "valueQuantity": {"value": 34, "unit": "furlong"},
    }  # fmt: skip
    future = {**tracing, "id": "later", "effectiveDateTime": "2027-01-01T00:00:00Z"}
    found["results"] = searchset([tracing, pressure, future])
    said = details(hooked, hook_call(prefetch=found))
    line = "sent, and not used because it could not be read: a number by its unit, something of a time"
    assert said.count(line) == 1
    assert "furlong" not in said


def test_rules_and_answers_are_counted(hooked: TestClient, hook_call: Make) -> None:
    (card,) = hooked.post(VIEW, json=hook_call()).json()["cards"]
    report = {"card": card["uuid"], "outcome": "overridden", "outcomeTimestamp": "2026-12-01T08:00:00Z",
              "overrideReason": {"reason": card["overrideReasons"][0]}}  # fmt: skip
    for _ in range(2):
        assert hooked.post(f"{VIEW}/feedback", json={"feedback": [report]}).status_code == 200
    page = hooked.app.state.metrics.page().decode()  # type: ignore[attr-defined]
    rule = "s4.in-atrial-fibrillation"
    assert f'fhirgallop_rules_total{{fate="shown",rule="{rule}"}} 1.0' in page
    assert f'fhirgallop_card_answers_total{{outcome="overridden",rule="{rule}"}} 1.0' in page


def test_without_its_audit_event_no_card_is_kept_or_shown(
    hooked: TestClient, hook_call: Make, tmp_path: Path
) -> None:
    call = hook_call()
    with closing(sqlite3.connect(tmp_path / "hooks.sqlite3")) as database:
        database.execute("ALTER TABLE audit RENAME TO away")
        answer = hooked.post(VIEW, json=call)
        assert answer.status_code == 503
        assert "cards" not in answer.json()
        for table in ("hook_cards", "hook_memories", "hook_instances"):
            assert database.execute(f"SELECT count(*) FROM {table}").fetchone() == (0,)
        database.execute("ALTER TABLE away RENAME TO audit")
        assert hooked.post(VIEW, json=call).json()["cards"]
        assert database.execute("SELECT count(*) FROM audit").fetchone() == (1,), "one event, with the cards"
