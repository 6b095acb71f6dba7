"""Around the examinations: maps, health, the page, error answers, headers, foreign pages, the log."""

from __future__ import annotations

import logging
import re
from pathlib import Path
from typing import Any

import pytest
from fastapi import FastAPI
from starlette.testclient import TestClient

from fhirgallop import settings
from fhirgallop.exam import catalogue
from fhirgallop.service.app import create_app
from fhirgallop.storage.submissions import StorageError

WHERE = "/exams?map=fernwood-heart-form"


def outcome(answer: Any) -> tuple[int, str, str]:
    """Status, issue code and rule of an error answer, which has to be an OperationOutcome."""
    assert answer.headers["content-type"] == "application/fhir+json"
    told = answer.json()
    assert told["resourceType"] == "OperationOutcome"
    (issue, *_) = told["issue"]
    return answer.status_code, issue["code"], issue["details"]["coding"][0]["code"]


def test_maps_are_listed_and_described(client: Any) -> None:
    listed = client.get("/maps").json()["maps"]
    assert {"fernwood-heart-form", "circor-2022"} <= {one["name"] for one in listed}
    one = client.get("/maps/fernwood-heart-form").json()
    assert one["version"] == "2026.1"
    assert "heart.s4" in one["fields"]
    assert {"heart-sound.s4", "general.pallor", "murmur.systolic"} <= set(one["findings"])
    assert one["coverage"] == {"findings": len(one["findings"]), "of": len(catalogue.load().findings)}


def test_health(client: Any) -> None:
    assert client.get("/health").json()["status"] == "up"


@pytest.mark.parametrize(
    ("method", "path", "expected"),
    [
        ("GET", "/nowhere", (404, "not-found", "http-404")),
        ("GET", "/maps/nowhere", (404, "not-found", "http-unknown-map")),
        ("GET", "/maps?page=2", (400, "not-supported", "http-unknown-parameter")),
        ("PUT", "/exams", (405, "not-supported", "http-405")),
        ("DELETE", "/maps/circor-2022", (405, "not-supported", "http-405")),
        ("PUT", "/health", (405, "not-supported", "http-405")),
    ],
)
def test_errors_of_the_framework_are_outcomes_too(client: Any, method: str, path: str, expected: Any) -> None:
    answer = client.request(method, path)
    assert outcome(answer) == expected
    if answer.status_code == 405:
        assert answer.headers["allow"]


def test_what_breaks_inside_is_an_outcome_and_tells_nothing(
    application: FastAPI, client: Any, example: Any, caplog: pytest.LogCaptureFixture
) -> None:
    def broken(*_: Any, **__: Any) -> None:
        raise ZeroDivisionError("F-20417")

    application.state.exams.one = broken
    with caplog.at_level(logging.DEBUG):
        answer = client.post(WHERE, json=example())
    assert outcome(answer) == (500, "exception", "service-broke")
    assert "F-20417" not in answer.text + caplog.text
    assert "ZeroDivisionError" in caplog.text


def test_a_failing_database_is_told_and_the_rest_of_a_batch_does_not_wait_for_it(
    application: FastAPI, client: Any, example: Any
) -> None:
    tried = 0

    class Full:
        def latest(self, *_: Any, **__: Any) -> None:
            return None

        def seen(self, *_: Any) -> list[Any]:
            return []

        def add(self, *_: Any) -> bool:
            nonlocal tried
            tried += 1
            raise StorageError("OperationalError")

    application.state.exams._examinations._store = Full()
    answer = client.post(WHERE, json=example())
    assert outcome(answer) == (503, "transient", "storage-failed")
    assert answer.headers["retry-after"]
    several = client.post(WHERE, json=[example()] * 3).json()
    assert [one["status"] for one in several["results"]] == ["not-stored"] * 3
    assert not any("bundle" in one for one in several["results"]), "what is not kept is not handed out"
    assert tried == 2


@pytest.mark.parametrize("path", ["/docs", "/openapi.json", "/maps", "/nowhere", "/style.css"])
def test_every_answer_has_safe_headers(client: Any, path: str) -> None:
    headers = client.get(path).headers
    assert headers["x-content-type-options"] == "nosniff"
    assert headers["cache-control"] == "no-store"
    assert headers["referrer-policy"] == "no-referrer"
    policy = headers["content-security-policy"]
    assert "default-src 'none'" in policy
    assert "frame-ancestors 'none'" in policy
    assert "unsafe" not in policy


def test_the_page_shows_every_address_and_asks_no_other_host(client: Any) -> None:
    page = client.get("/docs").text
    described = client.get("/openapi.json").json()
    for path in described["paths"]:
        assert path in page
    assert re.findall(r'(?:src|href)="([^"]*)"', page) == ["/style.css", "/openapi.json"]
    assert "<script" not in page
    assert "<code>Accept: application/fhir+json</code>" in page
    assert "http://localhost:8470/exams?map=NAME" in page
    assert "url(" not in client.get("/style.css").text


@pytest.mark.parametrize(
    ("headers", "expected"),
    [
        ({"Origin": "https://elsewhere.example"}, (403, "forbidden", "http-origin")),
        ({"Origin": "null"}, (403, "forbidden", "http-origin")),
        ({"Sec-Fetch-Site": "cross-site"}, (403, "forbidden", "http-origin")),
        ({"Host": "elsewhere.example"}, (421, "forbidden", "http-host")),
        ({"Host": "localhost.elsewhere.example:8470"}, (421, "forbidden", "http-host")),
        ({"Host": "[oops"}, (421, "forbidden", "http-host")),
    ],
)
def test_pages_of_other_sites_are_kept_out(client: Any, headers: Any, expected: Any) -> None:
    """A form on any web page may post text/plain to this machine: it must not get in."""
    sent = client.post(WHERE, content="MSH|", headers={"Content-Type": "text/plain", **headers})
    assert outcome(sent) == expected


def test_own_pages_and_other_programs_get_in(client: Any) -> None:
    for headers in ({}, {"Origin": "http://localhost:8470", "Sec-Fetch-Site": "same-origin"},
                    {"Host": "127.0.0.1:9"}, {"Host": "[::1]:8470"}):  # fmt: skip
        assert client.get("/health", headers=headers).status_code == 200


def test_no_patient_data_in_the_log(client: Any, example: Any, caplog: pytest.LogCaptureFixture) -> None:
    with caplog.at_level(logging.DEBUG):
        client.post(WHERE, json=example())
        client.post(WHERE, json=example(vitals={"hr": "seventy-eight"}))
        client.post(WHERE, json=[example(heart={"s4": "thundering"}), example()])
        client.get("/maps/F-20417")
        client.get("/F-20417/E-2026-0314-07?patient=F-20417")
        client.post(WHERE + "&patient=F-20417", json=example())
    own = [r.getMessage() for r in caplog.records if not r.name.startswith(("httpx", "httpcore"))]
    text = "\n".join(own)
    assert text.count("POST /exams") == 4
    for secret in ("F-20417", "E-2026-0314-07", "V-8812", "S-31", "seventy", "thundering", "Paler", "152/84"):
        assert secret not in text


def test_the_description_names_every_body_and_error(client: Any) -> None:
    operation = client.get("/openapi.json").json()["paths"]["/exams"]["post"]
    assert {"application/json", "text/csv", "application/fhir+json", "x-application/hl7-v2+er7",
            "application/x-ndjson"} <= set(operation["requestBody"]["content"])  # fmt: skip
    assert {"200", "400", "404", "406", "413", "415", "422", "503"} <= set(operation["responses"])
    assert "HTTPValidationError" not in client.get("/openapi.json").text


def test_examinations_outlive_the_service(root: Path, tmp_path: Path, example: Any) -> None:
    chosen = settings.load(
        maps=root / "examples/informatician", database=f"sqlite:///{tmp_path / 'a.sqlite3'}"
    )
    answers = []
    for _ in range(2):
        with TestClient(create_app(chosen), base_url="http://localhost") as client:
            answers.append(
                client.post(WHERE, json=example(), headers={"Accept": "application/fhir+json"}).content
            )
    assert answers[0] == answers[1]
