"""The operator's page: what waits and what has failed, sent again or given up; no patient's data."""

from __future__ import annotations

import re
from collections.abc import Callable, Iterator
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import pytest
from fastapi import FastAPI
from sqlalchemy import Engine, create_engine, text
from starlette.testclient import TestClient

from fhirgallop import settings
from fhirgallop.service.app import create_app

NOW = datetime(2026, 12, 1, 8, 0, tzinfo=UTC)


@pytest.fixture
def delivering(tmp_path: Path, root: Path, example: Callable[..., dict[str, Any]]) -> Iterator[TestClient]:
    """A service that is to deliver and whose workers are elsewhere, with three deliveries."""
    chosen = settings.load(
        maps=root / "examples/informatician",
        database=f"sqlite:///{tmp_path / 'out.sqlite3'}",
        deliver_to="http://127.0.0.1:9/fhir",
        loopback_http=True,
        delivery_workers=0,
    )
    with TestClient(create_app(chosen, lambda: NOW), base_url="http://localhost:8470") as speaking:
        for number in range(3):
            record = example(exam={"number": f"E-{number}"}, patient={"number": f"F-{number}"})
            assert speaking.post("/exams?map=fernwood-heart-form", json=record).status_code == 200
        yield speaking


@pytest.fixture
def database(delivering: TestClient) -> Iterator[Engine]:
    """The database of the service."""
    application = delivering.app
    assert isinstance(application, FastAPI)
    engine = create_engine(application.state.settings.database)
    yield engine
    engine.dispose()


def _fail(database: Engine, number: int, reason: str) -> None:
    with database.begin() as connection:
        connection.execute(
            text("UPDATE outbox SET state = 'failed', reason = :reason, attempts = 4 WHERE id = :number"),
            {"number": number, "reason": reason},
        )


def _state(database: Engine, number: int) -> tuple[str, str]:
    with database.connect() as connection:
        row = connection.execute(text("SELECT state, reason FROM outbox WHERE id = :n"), {"n": number}).one()
    return row.state, row.reason


def test_what_waits_and_what_failed_stands_there_with_its_reason(
    delivering: TestClient, database: Engine
) -> None:
    _fail(database, 2, "refused with status 422")
    page = delivering.get("/deliveries").text
    assert re.search(r"1 × refused with status 422", page)
    assert page.count('<span class="tag bad">failed, wants you</span>') == 1
    assert re.search(r"<dt>waiting</dt><dd><a[^>]*>2</a>", page)
    only = delivering.get("/deliveries?state=failed").text
    assert re.findall(r'<th scope="row" data-name="Delivery">(\d+)</th>', only) == ["2"]
    for secret in ("F-0", "F-1", "E-0", "fernwood.example"):
        assert secret not in page


def test_one_or_all_failed_ones_are_sent_again(delivering: TestClient, database: Engine) -> None:
    for number in (1, 2, 3):
        _fail(database, number, "x")
    assert (
        delivering.post("/deliveries/again", data={"number": "2"}, follow_redirects=False).status_code == 303
    )
    assert [_state(database, number)[0] for number in (1, 2, 3)] == ["failed", "waiting", "failed"]
    delivering.post("/deliveries/again", data={"number": ""})
    assert [_state(database, number)[0] for number in (1, 2, 3)] == ["waiting"] * 3


def test_giving_up_wants_a_reason_and_keeps_it(delivering: TestClient, database: Engine) -> None:
    _fail(database, 1, "x")
    assert delivering.post("/deliveries/given-up", data={"number": "1", "reason": " "}).status_code == 422
    assert _state(database, 1)[0] == "failed"
    delivering.post("/deliveries/given-up", data={"number": "1", "reason": "sent by hand"})
    assert _state(database, 1) == ("dropped", "given up: sent by hand")
    assert "given up: sent by hand" in delivering.get("/deliveries?state=dropped").text


def test_a_resting_record_system_is_said_to_rest_and_is_asked_at_once(
    delivering: TestClient, database: Engine
) -> None:
    until = int(NOW.timestamp() * 1000) + 300_000
    with database.begin() as connection:
        connection.execute(
            text("INSERT INTO destinations (name, failures, open_until) VALUES ('record-system', 7, :until)"),
            {"until": until},
        )
    page = delivering.get("/deliveries").text
    assert "left alone for another 5 minutes, after 7 failures in a row" in page
    delivering.post("/deliveries/again", data={"number": ""})
    assert "resting" not in delivering.get("/deliveries").text


def test_a_service_that_delivers_to_nobody_says_so(client: TestClient) -> None:
    assert "set to deliver to nobody" in client.get("/deliveries").text


def test_the_start_page_shows_each_way_and_what_runs(client: TestClient) -> None:
    page = client.get("/").text
    for address in ("/exams", "/desk", "/deliveries", "/knowledge"):
        assert f'<a class="button" href="{address}">' in page
    for said in ("coding to FHIR R4", "fernwood-heart-form, version 2026.1", "no reassurance"):
        assert said in page
