"""The chart of an examination's page, read from the record system that is listed for everybody."""

from __future__ import annotations

import re
from collections.abc import Callable
from html import unescape
from typing import Any

import pytest
from starlette.testclient import TestClient

Json = dict[str, Any]


def _plain(page: str) -> str:
    return " ".join(unescape(re.sub(r"<[^>]*>", " ", page)).split())


@pytest.fixture
def reading(
    hooked_with: Callable[..., TestClient], chart_peer: Any, example: Callable[..., Json]
) -> TestClient:
    """The service with the server listed for everybody, and the example examination."""
    given = {"cds_charts": {"*": [chart_peer.base]}, "loopback_http": True, "chart_milliseconds": 5000}
    speaking = hooked_with(**given)
    assert speaking.post("/exams?map=fernwood-heart-form", json=example()).status_code == 200
    return speaking


def _read(client: TestClient) -> str:
    found = re.search(r'href="(/exams/[0-9a-f-]{36})"', client.get("/exams").text)
    assert found
    page = client.get(found[1]).text
    assert "Read the chart from the record system" in page
    answer = client.post(f"{found[1]}/chart", data={"from": "record-system"})
    assert answer.status_code == 200
    return _plain(answer.text)


def test_the_patient_is_found_by_identifier_and_the_chart_is_used(
    reading: TestClient, chart_peer: Any
) -> None:
    words = _read(reading)
    assert "Held against the chart, as far as it could be read." in words
    asked = [one["path"] for one in chart_peer.asked()]
    assert asked[0].startswith("/fhir/Patient?identifier=https%3A%2F%2Ffernwood.example%2Fpatients%7CF-20417")
    assert any(path.startswith("/fhir/Condition?patient=p-20417") for path in asked)


def test_what_the_record_system_holds_of_this_examination_is_no_second_witness(
    reading: TestClient, chart_peer: Any, kept: list[Json]
) -> None:
    held = chart_peer.get("Observation?category=exam,vital-signs")
    assert 20 < held["total"] <= len(kept)  # the peer has this very examination, under ids of its own
    words = _read(reading)
    assert "earlier examination" not in words
    assert "more that say the same" not in words


def test_a_patient_of_another_identifier_is_nobody(
    reading: TestClient, chart_peer: Any, prefetch: Callable[..., Json]
) -> None:
    patient = prefetch()["patient"]
    other = {**patient, "identifier": [{"system": "urn:other", "value": "F-20417"}]}
    for held in ([], [other], [patient, {**patient, "id": "twin"}]):
        chart_peer.holds(held)
        words = _read(reading)
        assert "the record system does not know this patient, knows several" in words
        assert "held against itself only" in words
        assert all("/Condition" not in one["path"] for one in chart_peer.asked())


def test_what_is_not_to_be_had_is_said(
    reading: TestClient, chart_peer: Any, prefetch: Callable[..., Json]
) -> None:
    chart_peer.holds([prefetch()["patient"]], Condition={"status": 403}, Device={"body": "x"})
    words = _read(reading)
    assert "not permitted to be fetched: the problem list" in words
    assert "could not be fetched: devices" in words


def test_without_a_listed_server_there_is_no_such_button(client: TestClient, examined: TestClient) -> None:
    found = re.search(r'href="(/exams/[0-9a-f-]{36})"', examined.get("/exams").text)
    assert found
    assert "Read the chart from the record system" not in client.get(found[1]).text
    assert client.post(f"{found[1]}/chart", data={"from": "record-system"}).status_code == 404
