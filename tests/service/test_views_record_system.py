"""The chart of an examination's page, read from the record system that is listed for everybody."""

from __future__ import annotations

import re
from collections.abc import Callable
from datetime import datetime
from html import unescape
from pathlib import Path
from typing import Any

import pytest
from starlette.testclient import TestClient

from fhirgallop.api import process
from fhirgallop.cards.policy import Policy
from fhirgallop.codes import fhirjson
from fhirgallop.reasoning import rulebook
from fhirgallop.service.views.considering import consider
from fhirgallop.service.views.examination import read_examination

Json = dict[str, Any]
SEEN = datetime.fromisoformat("2026-03-14T10:00:00+01:00")
PATIENT = ("https://fernwood.example/patients", "F-20417")


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


def test_an_earlier_version_at_another_time_is_no_second_witness(kept: list[Json], root: Path) -> None:
    """Its time was corrected since: what the record system still holds of it is known by its identifiers."""
    record = (root / "examples/ehr/fernwood-exam.json").read_bytes()
    coded = process(record, root / "examples/informatician/fernwood-heart-form.yaml")
    exam = read_examination(fhirjson.write(coded.bundle), SEEN)
    held = [
        {**one, "effectiveDateTime": "2026-03-14T08:00:00+01:00",
         "subject": {"identifier": {"system": PATIENT[0], "value": PATIENT[1]}}}
        for one in kept
    ]  # fmt: skip
    strangers = [{name: value for name, value in one.items() if name != "identifier"} for one in held]
    for chart, witnesses in ((held, False), (strangers, True)):
        found = consider(exam, chart, SEEN, rules=rulebook.load(), policy=Policy())
        assert found.context is not None
        assert bool(found.context.facts) == witnesses


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
