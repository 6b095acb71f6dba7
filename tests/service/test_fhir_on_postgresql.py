"""The FHIR addresses over PostgreSQL: what is found, in which order, and who is first of many at once."""

from __future__ import annotations

import threading
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest
from starlette.testclient import TestClient

from fhirgallop import settings
from fhirgallop.service.app import create_app

FHIR = {"Content-Type": "application/fhir+json"}
BASE = "/fhir/r4/Observation"


@pytest.fixture
def client(postgres: str, root: Path) -> Iterator[TestClient]:
    chosen = settings.load(maps=root / "examples/informatician", database=postgres)
    with TestClient(create_app(chosen), base_url="http://localhost", raise_server_exceptions=False) as made:
        yield made


def pages(client: TestClient, url: str) -> list[str]:
    seen: list[str] = []
    while url:
        page = client.get(url).json()
        seen += [entry["resource"]["id"] for entry in page.get("entry", [])]
        url = next((link["url"] for link in page["link"] if link["relation"] == "next"), "")
    return seen


def test_the_same_as_over_the_embedded_database(
    client: TestClient, still: TestClient, example: Any, of_patient: dict[str, str]
) -> None:
    answer = client.post("/exams", params={"map": "fernwood-heart-form"}, json=example())
    assert answer.status_code == 200
    for query in (
        "code=8867-4", "category=vital-signs", "date=ge2026-03-14", "date=lt2026-03-14", "_total=accurate",
        "encounter:identifier=https://fernwood.example/visits|V-8812", "status:not=final", "code:not=8867-4",
        "identifier=urn:ietf:rfc:3986|urn:uuid:6b9b758b-e66a-52b0-b305-acfce98e4a0f",
    ):  # fmt: skip
        ours, theirs = (one.get(f"{BASE}?{query}&_count=200").json() for one in (client, still))
        assert ours.get("total") == theirs.get("total"), query
        assert {entry["resource"]["id"] for entry in ours.get("entry", [])} == {
            entry["resource"]["id"] for entry in theirs.get("entry", [])
        }, query
    for order in ("date", "-date", "_lastUpdated", "-_lastUpdated"):
        whole = pages(client, f"{BASE}?_sort={order}&_count=200")
        assert pages(client, f"{BASE}?_sort={order}&_count=7") == whole
        assert len(set(whole)) == 34
    assert client.get(BASE, params=of_patient).json()["total"] == 34


def test_many_transactions_at_once_keep_one_of_each(client: TestClient, coded_bundle: dict[str, Any]) -> None:
    statuses: list[int] = []

    def send() -> None:
        statuses.append(client.post("/fhir/r4", json=coded_bundle, headers=FHIR).status_code)

    threads = [threading.Thread(target=send) for _ in range(4)]
    for one in threads:
        one.start()
    for one in threads:
        one.join(60)
    # whoever was not first finds what the first one kept
    assert statuses == [200] * 4
    assert len(pages(client, f"{BASE}?_count=50")) == 34
    (report,) = client.get("/fhir/r4/DiagnosticReport").json()["entry"]
    assert client.get(f"{report['fullUrl']}/_history").json()["total"] == 1


def test_what_looks_like_sql_is_text(client: TestClient) -> None:
    for value in ("' or '1'='1", "%' or 1=1", "\x00", "\ud7ff", "'; drop table resources; --"):
        for name in ("_id", "code", "identifier", "patient", "encounter:identifier"):
            answer = client.get(BASE, params={name: f"x|{value}" if ":" in name else value})
            assert answer.status_code in (200, 400), (name, answer.text)
