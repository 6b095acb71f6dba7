"""$validate over HTTP: one OperationOutcome, and 200 whenever the check could be run."""

from __future__ import annotations

import json
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest
from starlette.testclient import TestClient

from fhirgallop.conformance.validator import validate
from fhirgallop.service.app import create_app
from fhirgallop.settings import load

GOOD = {
    "resourceType": "Observation",
    "status": "final",
    "code": {"text": "Fourth heart sound"},
    "text": {"status": "generated", "div": '<div xmlns="http://www.w3.org/1999/xhtml">S4</div>'},
}
BAD = GOOD | {"status": "done"}


@pytest.fixture(scope="module")
def client(tmp_path_factory: pytest.TempPathFactory, root: Path) -> Iterator[TestClient]:
    folder = tmp_path_factory.mktemp("validate")
    chosen = load(maps=root / "tests/cases/faces/maps", database=f"sqlite:///{folder / 'v.sqlite3'}")
    with TestClient(create_app(chosen), base_url="http://localhost") as made:
        yield made


def send(client: TestClient, body: Any, address: str = "/fhir/r4/$validate", **extra: Any) -> Any:
    text = body if isinstance(body, bytes) else json.dumps(body).encode()
    headers = {"Content-Type": "application/fhir+json"} | extra.pop("headers", {})
    return client.post(address, content=text, headers=headers, **extra)


def rules(answer: Any) -> list[str]:
    outcome = answer.json()
    assert outcome["resourceType"] == "OperationOutcome"
    assert outcome["issue"]
    return [i["details"]["coding"][0]["code"] for i in outcome["issue"] if "coding" in i["details"]]


@pytest.mark.parametrize("edition", ["r4", "r4b", "r5"])
def test_a_good_resource_is_told_to_be_well(client: TestClient, edition: str) -> None:
    answer = send(client, GOOD, f"/fhir/{edition}/$validate")
    assert answer.status_code == 200
    assert [i["severity"] for i in answer.json()["issue"]] == ["information"]


def test_a_bad_resource_is_200_with_its_errors(client: TestClient) -> None:
    answer = send(client, BAD)
    assert answer.status_code == 200
    assert rules(answer) == [issue.rule for issue in validate(BAD)]
    assert answer.json()["issue"][0]["expression"] == ["Observation.status"]


def test_parameters_hold_resource_and_profile(client: TestClient) -> None:
    profile = "https://fhirgallop.org/fhir/StructureDefinition/exam-finding"
    parameters = {
        "resourceType": "Parameters",
        "parameter": [{"name": "resource", "resource": GOOD}, {"name": "profile", "valueUri": profile}],
    }
    by_parameter = send(client, parameters, "/fhir/r4/Observation/$validate")
    by_query = send(client, GOOD, params={"profile": profile})
    assert rules(by_parameter) == rules(by_query) == [i.rule for i in validate(GOOD, profiles=[profile])]


def test_an_unknown_profile_is_said_not_passed_over(client: TestClient) -> None:
    asked = send(client, GOOD, params={"profile": "https://example.org/unknown"})
    assert (asked.status_code, rules(asked)) == (422, ["http-unknown-profile"])
    claimed = send(client, GOOD | {"meta": {"profile": ["https://example.org/unknown"]}})
    assert claimed.status_code == 200
    assert [i["severity"] for i in claimed.json()["issue"]] == ["warning"]


def test_another_type_than_the_address_is_refused(client: TestClient) -> None:
    assert "http-other-type" in rules(send(client, GOOD, "/fhir/r4/Patient/$validate"))


@pytest.mark.parametrize(
    ("body", "address", "headers", "status"),
    [
        (GOOD, "/fhir/r9/$validate", {}, 400),
        (GOOD, "/fhir/r4/Nonsense/$validate", {}, 404),
        (GOOD, "/fhir/r4/$validate", {"Content-Type": "text/csv"}, 415),
        (GOOD, "/fhir/r4/$validate", {"Accept": "application/fhir+xml"}, 406),
        ({"resourceType": "Parameters", "parameter": []}, "/fhir/r4/$validate", {}, 400),
        (
            {"resourceType": "Parameters", "parameter": [{"name": "mode", "valueCode": "delete"}]},
            "/fhir/r4/$validate",
            {},
            400,
        ),
    ],
)
def test_what_cannot_be_run_is_refused(
    client: TestClient, body: Any, address: str, headers: dict[str, str], status: int
) -> None:
    answer = send(client, body, address, headers=headers)
    assert answer.status_code == status
    assert rules(answer)


@pytest.mark.parametrize(
    "body", [b"", b"{", b"[]", b'{"resourceType": "Observation", "status": 1, "status": 2}']
)
def test_what_is_no_resource_is_told_by_the_judge(client: TestClient, body: bytes) -> None:
    answer = send(client, body)
    assert answer.status_code == 400
    assert answer.json()["issue"][0]["severity"] in ("fatal", "error")
