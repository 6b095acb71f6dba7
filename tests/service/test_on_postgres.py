"""The service on PostgreSQL: the same answers as on SQLite, also to text that PostgreSQL does not keep."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any
from urllib.parse import quote

import pytest
from starlette.testclient import TestClient

from fhirgallop import settings
from fhirgallop.service.app import create_app

URL = "/exams?map=fernwood-heart-form"
VIEW = "/cds-services/exam-review-patient-view"
ODD = ("a\0b", "\0", "\ufffe", "x" * 5000, "'; DROP TABLE resources; --", "%", "\\", "é|é")


@pytest.fixture
def both(postgres: str, hooked: TestClient, root: Path) -> Iterator[tuple[TestClient, TestClient]]:
    """The same service twice, on SQLite and on PostgreSQL."""
    chosen = settings.load(
        maps=root / "examples/informatician", database=postgres, pages="http://localhost:8470"
    )
    clock = hooked.app.state.clock  # type: ignore[attr-defined]
    app = create_app(chosen, clock)
    with TestClient(app, base_url="http://localhost:8470", raise_server_exceptions=False) as speaking:
        yield hooked, speaking


def test_the_log_says_which_kind_of_database_it_is(
    postgres: str, root: Path, tmp_path: Path, caplog: pytest.LogCaptureFixture
) -> None:
    for address, kind in (
        (postgres, "PostgreSQL"),
        (f"sqlite:///{tmp_path / 'x.sqlite3'}", "an embedded file"),
    ):
        caplog.clear()
        caplog.set_level("INFO")
        app = create_app(settings.load(maps=root / "examples/informatician", database=address))
        with TestClient(app):  # which closes the database in the end
            pass
        assert f"the database is {kind}" in caplog.text


def test_the_answers_are_the_same(
    both: tuple[TestClient, TestClient], example: Callable[..., Any], hook_call: Callable[..., Any]
) -> None:
    call = hook_call()
    first: list[Any] = []
    second: list[Any] = []
    for speaking, seen in zip(both, (first, second), strict=True):
        for record in (example(), example(heart={"s4": "no"}), example()):
            answer = speaking.post(URL, json=record)
            assert answer.status_code == 200
            seen.append(answer.json())
        number = seen[0]["bundle"]["entry"][0]["fullUrl"].removeprefix("urn:uuid:")
        for path in (
            f"/fhir/r4/Observation/{number}",
            f"/fhir/r4/Observation/{number}/_history",
            "/fhir/r4/Observation?patient:identifier=https%3A%2F%2Ffernwood.example%2Fpatients%7CF-20417",
            "/fhir/r4/Observation?_count=3",
            "/maps",
        ):
            answer = speaking.get(path)
            assert answer.status_code == 200, path
            body = answer.json()
            body.pop("id", None)
            seen.append(body)
        seen.append(speaking.post(VIEW, json=call).json())
        assert seen[-1]["cards"]
    assert first == second


def test_a_database_that_is_away_is_told_and_got_over_by_itself(
    both: tuple[TestClient, TestClient], postgres_server: Any, example: Callable[..., Any]
) -> None:
    speaking = both[1]
    first = speaking.post(URL, json=example())
    assert first.status_code == 200
    postgres_server.stop()
    try:
        for answer in (speaking.post(URL, json=example(heart={"s4": "no"})), speaking.get("/ready")):
            assert answer.status_code == 503
        refused = speaking.post(URL, json=example(heart={"s4": "no"}))
        assert refused.json()["resourceType"] == "OperationOutcome"
        assert speaking.get("/health").status_code == 200
    finally:
        postgres_server.start()
    assert speaking.get("/ready").status_code == 200
    assert speaking.post(URL, json=example()).json()["bundle"] == first.json()["bundle"]
    amended = speaking.post(URL, json=example(heart={"s4": "no"}))
    assert amended.status_code == 200


def test_odd_text_is_answered_and_breaks_nothing(
    both: tuple[TestClient, TestClient], hook_call: Callable[..., Any]
) -> None:
    for speaking in both:
        card = speaking.post(VIEW, json=hook_call()).json()["cards"][0]["uuid"]
        report = {"card": card, "outcome": "overridden", "outcomeTimestamp": "2026-03-14T10:00:00Z"}
        for text in ODD:
            for reason in ({"userComment": text}, {"reason": {"code": text, "system": "urn:s"}}):
                body = {"feedback": [{**report, "overrideReason": reason}]}
                wanted = 400 if "\0" in text or len(text) > 4000 else 200
                assert speaking.post(f"{VIEW}/feedback", json=body).status_code == wanted
            said = quote(text)
            for query in (
                f"code={said}", f"code=urn:s|{said}", f"_id={said}", f"identifier=urn:s|{said}",
                f"_tag={said}", f"patient:identifier=urn:s|{said}", f"encounter:identifier=|{said}",
                f"date={said}", f"category={said}", f"_lastUpdated={said}",
            ):  # fmt: skip
                answer = speaking.get(f"/fhir/r4/Observation?{query}")
                assert answer.status_code in {200, 400}, query
            assert speaking.get(f"/fhir/r4/Observation/{quote(text, safe='')}").status_code in {400, 404}
