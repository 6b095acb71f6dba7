"""Health, readiness and metrics: what a balancer, an operator and Prometheus see."""

from __future__ import annotations

import asyncio
import gc
import hashlib
import json
import logging
import re
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest
from fastapi import FastAPI
from prometheus_client.parser import text_string_to_metric_families
from sqlalchemy import text
from starlette.testclient import TestClient

from fhirgallop import settings
from fhirgallop.outcome import Issue
from fhirgallop.service.app import create_app
from fhirgallop.service.server import Server

WHERE = "/exams?map=fernwood-heart-form"


def figures(client: Any) -> dict[tuple[str, ...], float]:
    """Every figure of the page, by name and label values; the text format is read by the library."""
    page = client.get("/metrics")
    assert page.status_code == 200
    assert page.headers["content-type"].startswith("text/plain; version=0.0.4")
    return {
        (sample.name, *sample.labels.values()): sample.value
        for family in text_string_to_metric_families(page.text)
        for sample in family.samples
    }


def test_health_says_that_the_process_is_up(client: Any) -> None:
    assert client.get("/health").json()["status"] == "up"


def test_a_sound_service_is_ready_in_every_part(client: Any) -> None:
    answer = client.get("/ready")
    assert answer.status_code == 200
    assert answer.json()["status"] == "ready"
    assert {name: part["state"] for name, part in answer.json()["parts"].items()} == dict.fromkeys(
        ("process", "database", "definitions", "deliveries", "disk"), "well"
    )


@pytest.mark.parametrize(
    ("spoil", "part"),
    [
        (lambda state: setattr(state.readiness, "draining", True), "process"),
        (lambda state: _change(state, "UPDATE schema_version SET version = 1"), "database"),
        (lambda state: _change(state, "UPDATE schema_version SET version = 999"), "database"),
        (lambda state: _change(state, "DROP TABLE outbox"), "deliveries"),
        (lambda state: object.__setattr__(state.settings, "free_disk", 10**12), "disk"),
        (lambda state: setattr(state.readiness, "_tried", False), "definitions"),
    ],
)
def test_a_part_that_fails_is_named_with_its_reason(
    application: FastAPI, client: Any, spoil: Callable[[Any], None], part: str
) -> None:
    spoil(application.state)
    answer = client.get("/ready")
    assert answer.status_code == 503
    told = answer.json()["parts"]
    assert told[part]["state"] == "failed"
    assert told[part]["reason"]
    assert "sqlite" not in answer.text, "an address may hold a password"


def _change(state: Any, statement: str) -> None:
    with state.readiness.engine.begin() as connection:
        connection.execute(text(statement))


def _delivery(state: Any, *, now_state: str, created: int) -> None:
    insert = text(
        "INSERT INTO outbox (destination, submission, exam, patient, state, attempts, created, due, worker,"
        " lease, reason) VALUES ('record-system', (SELECT max(id) FROM submissions), 'x', 'p', :s, 1,"
        " :c, 0, '', 0, '')"
    )
    with state.readiness.engine.begin() as connection:
        connection.execute(insert, {"s": now_state, "c": created})


def test_deliveries_that_want_a_person_are_a_warning(application: FastAPI, client: Any, example: Any) -> None:
    client.post(WHERE, json=example())
    moment = int(application.state.clock().timestamp() * 1000)
    _delivery(application.state, now_state="waiting", created=moment)
    assert client.get("/ready").json()["parts"]["deliveries"]["state"] == "well"
    _delivery(application.state, now_state="waiting", created=moment - 16 * 60_000)
    told = client.get("/ready")
    assert told.status_code == 200
    assert told.json()["parts"]["deliveries"]["state"] == "warning"
    _delivery(application.state, now_state="failed", created=moment)
    assert "failed for good" in client.get("/ready").json()["parts"]["deliveries"]["reason"]
    found = figures(client)
    assert found["fhirgallop_deliveries", "waiting"] == 2
    assert found["fhirgallop_deliveries", "failed"] == 1
    assert found["fhirgallop_delivery_age_seconds",] > 15 * 60


def test_requests_are_counted_by_route_and_status(client: Any, example: Any) -> None:
    client.post(WHERE, json=example())
    client.post(WHERE, json={"nonsense": "F-20417"})
    client.get("/maps/F-20417")
    client.get("/F-20417")
    found = figures(client)
    assert found["fhirgallop_requests_total", "POST", "/exams", "200"] == 1
    assert found["fhirgallop_requests_total", "POST", "/exams", "422"] == 1
    assert found["fhirgallop_requests_total", "GET", "/maps/{name}", "404"] == 1
    assert found["fhirgallop_requests_total", "GET", "(none)", "404"] == 1
    assert found["fhirgallop_request_seconds_count", "/exams"] == 2
    assert found["fhirgallop_ready", "database"] == 1
    assert found["process_resident_memory_bytes",] > 0


def test_no_label_is_of_a_senders_making(client: Any, example: Any) -> None:
    client.post(WHERE, json=example())
    client.post("/exams?map=F-20417", json=example())
    client.get("/F-20417", headers={"X-Request-Id": "F-20417"})
    client.request("F20417", "/health")
    client.get("/rules/F-20417")
    page = client.get("/metrics").text
    assert "20417" not in page
    assert json.dumps(example()["patient"]) not in page


def test_every_figure_of_the_runbook_is_published(client: Any, root: Path) -> None:
    client.get("/maps")
    page = client.get("/metrics").text
    named = set(re.findall(r"`((?:fhirgallop|process)_\w+)", (root / "README.md").read_text("utf-8")))
    assert len(named) > 10
    for name in named:
        assert f"# TYPE {name} " in page, name


def test_the_trial_at_the_start_is_of_the_whole_way_and_keeps_nothing(
    application: FastAPI, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Where the judge refuses what we write, the service is not ready."""
    readiness = application.state.readiness
    issue = Issue("error", "structure", "made-up", "Made up.")
    monkeypatch.setattr("fhirgallop.pipeline.validate", lambda *_: [issue])
    readiness.try_out()
    parts = {part.name: part.state for part in readiness.parts()}
    assert parts["definitions"] == "failed"
    monkeypatch.undo()
    readiness.try_out()
    assert {part.state for part in readiness.parts()} == {"well"}
    with readiness.engine.connect() as connection:
        assert connection.scalar(text("SELECT count(*) FROM submissions")) == 0


def test_examinations_and_rules_are_counted_by_what_became_of_them(
    hooked: Any, example: Any, hook_call: Any
) -> None:
    hooked.post(WHERE, json=example())
    hooked.post(WHERE, json=example())
    hooked.post(WHERE, json=example(vitals={"hr": "seventy-eight"}))
    hooked.post(WHERE, json=[example(exam={"number": "E-2"}), {"nonsense": 1}])
    answer = hooked.post("/cds-services/exam-review-patient-view", json=hook_call()).json()
    (card,) = answer["cards"][:1]
    reason = card["overrideReasons"][0]
    report = {
        "card": card["uuid"], "outcome": "overridden", "outcomeTimestamp": "2026-03-14T10:00:00Z",
        "overrideReason": {"reason": {"code": reason["code"], "system": reason["system"]}},
    }  # fmt: skip
    for _ in range(2):
        hooked.post("/cds-services/exam-review-patient-view/feedback", json={"feedback": [report]})
    found = figures(hooked)
    made = {
        labels[2]: value for labels, value in found.items() if labels[0] == "fhirgallop_examinations_total"
    }
    assert made == {"coded": 2, "repeated": 1, "refused": 2}
    fates = {labels[1:] for labels in found if labels[0] == "fhirgallop_rules_total"}
    assert ("shown", "s4.in-atrial-fibrillation") in fates
    answers = [value for labels, value in found.items() if labels[0] == "fhirgallop_card_answers_total"]
    assert answers
    assert set(answers) == {1.0}, "a report that is sent again counts once"


def test_what_was_loaded_is_laid_aside_when_the_server_has_started(
    application: FastAPI, monkeypatch: pytest.MonkeyPatch
) -> None:
    async def started(*_: Any) -> None:
        return None

    monkeypatch.setattr("uvicorn.Server.startup", started)
    before = gc.get_freeze_count()
    try:
        asyncio.run(Server(application, application.state.settings).startup())
        assert gc.get_freeze_count() > before + 50_000
    finally:
        gc.unfreeze()


def test_figures_are_for_operators_and_a_caller_is_logged_by_a_digest(
    tmp_path: Path, root: Path, caplog: pytest.LogCaptureFixture
) -> None:
    token = "of-the-administrators-of-fernwood"
    chosen = settings.load(
        maps=root / "examples/informatician", database=f"sqlite:///{tmp_path / 'a.sqlite3'}",
        admin_token=hashlib.sha256(token.encode()).hexdigest(), address="http://localhost:8470",
    )  # fmt: skip
    with TestClient(create_app(chosen), base_url="http://localhost:8470") as client:
        assert client.get("/metrics").status_code == 401
        for path in ("/health", "/ready"):
            assert client.get(path).status_code == 200
        caplog.clear()
        with caplog.at_level(logging.INFO, "fhirgallop.service"):
            told = client.get("/metrics", headers={"Authorization": f"Bearer {token}"})
        assert told.status_code == 200
        assert b"fhirgallop_ready" in told.content
    (line,) = [record for record in caplog.records if record.getMessage() == "GET /metrics"]
    assert (line.caller, len(line.who)) == ("administrator", 12)  # type: ignore[attr-defined]
    assert token not in caplog.text
