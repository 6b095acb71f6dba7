"""Create and update, conditional or not, and what they are answered with.

Sources: FHIR R4 http.html; the numbered interoperability requirements (FR-7 to FR-12, FR-20, FR-22).
"""

from __future__ import annotations

import json
import threading
from typing import Any

import pytest
from starlette.testclient import TestClient

from fhirgallop.conformance.validator import validate
from fhirgallop.outcome import has_errors

BASE = "/fhir/r4/Observation"
FHIR = {"Content-Type": "application/fhir+json"}
R1 = "identifier=https://fernwood.example/results|R-1"


def rules(answer: Any) -> list[str]:
    outcome = answer.json()
    assert outcome["resourceType"] == "OperationOutcome"
    assert answer.headers["content-type"] == "application/fhir+json"
    return [issue["details"]["coding"][0]["code"] for issue in outcome["issue"]]


def count(client: TestClient) -> int:
    total: int = client.get(f"{BASE}?_total=accurate&_count=0").json()["total"]
    return total


def test_a_create_gives_id_version_and_place(client: TestClient, observation: dict[str, Any]) -> None:
    sent = {**observation, "id": "mine", "meta": {"versionId": "77", "lastUpdated": "2020-01-01T00:00:00Z"}}
    answer = client.post(BASE, json=sent, headers=FHIR)
    made = answer.json()
    assert answer.status_code == 201
    assert made["id"] != "mine"
    assert made["meta"]["versionId"] == "1"
    assert made["meta"]["lastUpdated"].startswith("2026-12-01T08:")
    assert answer.headers["location"] == f"http://localhost:8470{BASE}/{made['id']}/_history/1"
    assert answer.headers["etag"] == 'W/"1"'
    assert answer.headers["last-modified"].startswith("Tue, 01 Dec 2026 08:")
    assert client.get(answer.headers["location"]).json() == made
    without = {key: value for key, value in made.items() if key not in ("id", "meta")}
    assert without == observation


@pytest.mark.parametrize(
    ("prefer", "kind"),
    [
        ("return=minimal", None),
        ("return=representation", "Observation"),
        ("return=OperationOutcome", "OperationOutcome"),
        ("handling=strict, return=minimal", None),
        ("", "Observation"),
    ],
)
def test_what_comes_back_is_what_was_preferred(
    client: TestClient, observation: dict[str, Any], prefer: str, kind: str | None
) -> None:
    made = client.post(BASE, json=observation, headers={**FHIR, "Prefer": prefer})
    assert made.status_code == 201
    assert made.headers["etag"] == 'W/"1"'
    assert (made.json()["resourceType"] if made.content else None) == kind
    address = made.headers["location"].partition("/_history")[0]
    changed = {**observation, "id": address.rpartition("/")[2], "status": "amended"}
    put = client.put(address, json=changed, headers={**FHIR, "Prefer": prefer})
    assert put.status_code == 200
    assert (put.json()["resourceType"] if put.content else None) == kind


def test_decimals_keep_their_digits(client: TestClient, observation: dict[str, Any]) -> None:
    text = json.dumps(observation).replace('"value": 78', '"value": 78.10')
    made = client.post(BASE, content=text, headers=FHIR)
    assert b'"value":78.10,' in made.content
    assert b'"value":78.10,' in client.get(made.headers["location"]).content


@pytest.mark.parametrize(
    ("change", "status", "rule"),
    [
        ({"status": "bogus"}, 422, None),
        ({"code": None}, 400, None),
        ({"nonsense": 1}, 400, None),
        ({"resourceType": "DiagnosticReport"}, 400, "http-other-type"),
        ({"resourceType": "Bundle"}, 400, "http-other-type"),
        ({"dataAbsentReason": {"text": "none"}}, 422, "obs-6"),
        ({"effectiveDateTime": "2026-03-14T09:30:00"}, 400, None),
        ({"valueQuantity": None, "valueString": ""}, 400, None),
    ],
)
def test_what_does_not_conform_is_not_kept(
    client: TestClient, observation: dict[str, Any], change: dict[str, Any], status: int, rule: str | None
) -> None:
    sent = {key: value for key, value in {**observation, **change}.items() if value is not None}
    answer = client.post(BASE, json=sent, headers={**FHIR, "Prefer": "return=minimal"})
    assert answer.status_code == status, answer.text
    assert rule is None or rule in rules(answer)
    assert has_errors(validate(sent)) or rule == "http-other-type"
    assert count(client) == 0


@pytest.mark.parametrize(
    ("body", "headers", "status"),
    [
        (b"{", FHIR, 400),
        (b"[]", FHIR, 400),
        (b"", FHIR, 400),
        (b'{"resourceType": "Observation", "status": "final", "status": "final"}', FHIR, 400),
        (b"{}", {"Content-Type": "application/fhir+xml"}, 415),
        (b"{}", {"Content-Type": "application/fhir+json; fhirVersion=5.0"}, 415),
        (b"{}", {}, 415),
    ],
)
def test_what_is_no_resource(client: TestClient, body: bytes, headers: dict[str, str], status: int) -> None:
    answer = client.post(BASE, content=body, headers=headers)
    assert answer.status_code == status
    assert rules(answer)


def test_types_that_are_not_kept(client: TestClient) -> None:
    patient = {"resourceType": "Patient"}
    assert client.post("/fhir/r4/Patient", json=patient, headers=FHIR).status_code == 404
    assert client.post("/fhir/r4/Nonsense", json=patient, headers=FHIR).status_code == 404
    valueset = {"resourceType": "ValueSet", "status": "active"}
    assert client.post("/fhir/r4/ValueSet", json=valueset, headers=FHIR).status_code in (404, 405)


def test_conditional_create(client: TestClient, observation: dict[str, Any]) -> None:
    first = client.post(BASE, json=observation, headers={**FHIR, "If-None-Exist": R1})
    changed = {**observation, "status": "amended"}
    again = client.post(BASE, json=changed, headers={**FHIR, "If-None-Exist": R1})
    assert (first.status_code, again.status_code) == (201, 200)
    assert again.headers["location"] == first.headers["location"]
    assert again.json() == first.json()
    client.post(BASE, json=observation, headers=FHIR)
    third = client.post(BASE, json=observation, headers={**FHIR, "If-None-Exist": R1})
    assert (third.status_code, rules(third)) == (412, ["condition-several"])
    assert count(client) == 2


@pytest.mark.parametrize(
    ("condition", "status"),
    [("nonsense=1", 400), ("", 412), ("identifier", 400), ("_count=1", 412), ("code:in=x", 400),
     ("patient:identifier=7", 400)],
)  # fmt: skip
def test_conditions_that_cannot_be_meant(
    client: TestClient, observation: dict[str, Any], condition: str, status: int
) -> None:
    answer = client.post(BASE, json=observation, headers={**FHIR, "If-None-Exist": condition})
    assert answer.status_code == status
    assert count(client) == 0


def test_an_identity_is_created_once(client: TestClient, coded_bundle: dict[str, Any]) -> None:
    resource = coded_bundle["entry"][0]["resource"]
    first = client.post(BASE, json=resource, headers=FHIR)
    again = client.post(BASE, json=resource, headers=FHIR)
    assert first.status_code == 201
    assert f"urn:uuid:{first.json()['id']}" == resource["identifier"][0]["value"]
    assert (again.status_code, rules(again)) == (409, ["resource-duplicate"])


def test_update_makes_the_next_version(client: TestClient, observation: dict[str, Any]) -> None:
    made = client.post(BASE, json=observation, headers=FHIR).json()
    address = f"{BASE}/{made['id']}"
    changed = {**made, "status": "amended"}
    answer = client.put(address, json=changed, headers={**FHIR, "If-Match": 'W/"1"'})
    assert (answer.status_code, answer.headers["etag"]) == (200, 'W/"2"')
    assert answer.json()["meta"]["versionId"] == "2"
    same = client.put(address, json=answer.json(), headers=FHIR)
    assert (same.status_code, same.headers["etag"]) == (200, 'W/"2"')
    assert client.get(f"{address}/_history").json()["total"] == 2


@pytest.mark.parametrize(
    ("header", "status"),
    [('W/"1"', 412), ('"2"', 200), ('W/"2"', 200), ("2", 400), ("*", 400), ('W/"x"', 412)],
)
def test_if_match(client: TestClient, observation: dict[str, Any], header: str, status: int) -> None:
    made = client.post(BASE, json=observation, headers=FHIR).json()
    address = f"{BASE}/{made['id']}"
    client.put(address, json={**made, "status": "amended"}, headers=FHIR)
    answer = client.put(address, json={**made, "status": "corrected"}, headers={**FHIR, "If-Match": header})
    assert answer.status_code == status
    assert client.get(address).json()["status"] == ("corrected" if status == 200 else "amended")


def test_updates_that_are_refused(client: TestClient, observation: dict[str, Any]) -> None:
    made = client.post(BASE, json=observation, headers=FHIR).json()
    address = f"{BASE}/{made['id']}"
    other = client.put(address, json={**made, "id": "other"}, headers=FHIR)
    assert (other.status_code, rules(other)) == (400, ["http-other-id"])
    none = client.put(address, json=observation, headers=FHIR)
    assert none.status_code == 400
    unknown = client.put(f"{BASE}/nobody", json={**made, "id": "nobody"}, headers=FHIR)
    assert (unknown.status_code, rules(unknown)) == (405, ["update-unknown"])
    wrong = client.put(address, json={**made, "status": "bogus"}, headers=FHIR)
    assert wrong.status_code == 422
    assert client.get(address).headers["etag"] == 'W/"1"'


def test_an_identity_is_kept(client: TestClient, coded_bundle: dict[str, Any]) -> None:
    made = client.post(BASE, json=coded_bundle["entry"][0]["resource"], headers=FHIR).json()
    made["identifier"][0]["value"] = "urn:uuid:00000000-0000-4000-8000-000000000000"
    answer = client.put(f"{BASE}/{made['id']}", json=made, headers=FHIR)
    assert (answer.status_code, rules(answer)) == (422, ["resource-identity"])


def test_conditional_update(client: TestClient, observation: dict[str, Any]) -> None:
    """The same resource sent twice is one resource (FR-22)."""
    query = {"identifier": "https://fernwood.example/results|R-1"}
    made = client.put(BASE, params=query, json=observation, headers=FHIR)
    again = client.put(BASE, params=query, json=observation, headers=FHIR)
    changed = client.put(BASE, params=query, json={**observation, "status": "amended"}, headers=FHIR)
    assert [one.status_code for one in (made, again, changed)] == [201, 200, 200]
    assert [one.headers["etag"] for one in (made, again, changed)] == ['W/"1"', 'W/"1"', 'W/"2"']
    assert count(client) == 1
    stale = client.put(BASE, params=query, json=observation, headers={**FHIR, "If-Match": 'W/"1"'})
    assert stale.status_code == 412
    own = client.put(BASE, params=query, json={**observation, "id": "x"}, headers=FHIR)
    assert (own.status_code, rules(own)) == (400, ["http-other-id"])
    new = client.put(
        BASE, params={"identifier": "https://a.example|2"}, json={**observation, "id": "x"}, headers=FHIR
    )
    assert new.status_code == 405
    client.post(BASE, json=observation, headers=FHIR)
    several = client.put(BASE, params=query, json=observation, headers=FHIR)
    assert several.status_code == 412
    open_ = client.put(BASE, json=observation, headers=FHIR)
    assert open_.status_code == 412


def test_one_of_many_at_once_is_kept(client: TestClient, coded_bundle: dict[str, Any]) -> None:
    resource = coded_bundle["entry"][0]["resource"]
    statuses: list[int] = []

    def send() -> None:
        condition = f"identifier=urn:ietf:rfc:3986|{resource['identifier'][0]['value']}"
        answer = client.post(BASE, json=resource, headers={**FHIR, "If-None-Exist": condition})
        statuses.append(answer.status_code)

    threads = [threading.Thread(target=send) for _ in range(6)]
    for one in threads:
        one.start()
    for one in threads:
        one.join(30)
    assert sorted(statuses) == [200] * 5 + [201]
    assert count(client) == 1


def test_a_provenance_is_of_something_that_is_here(client: TestClient, coded_bundle: dict[str, Any]) -> None:
    trail = coded_bundle["entry"][-1]["resource"]
    trail["target"] = [{"reference": "Observation/nobody"}]
    answer = client.post("/fhir/r4/Provenance", json=trail, headers=FHIR)
    assert (answer.status_code, rules(answer)) == (422, ["provenance-targets"])


def test_too_large_and_too_deep(client: TestClient, observation: dict[str, Any]) -> None:
    large = client.post(BASE, content=b" " * (8 * 1024 * 1024 + 1), headers=FHIR)
    assert (large.status_code, rules(large)) == (413, ["http-body-too-large"])
    nested: dict[str, Any] = {"url": "https://a.example/x", "valueString": "x"}
    for _ in range(400):
        nested = {"url": "https://a.example/x", "extension": [nested]}
    deep = client.post(BASE, json={**observation, "extension": [nested]}, headers=FHIR)
    assert deep.status_code in (400, 413, 422)
    assert count(client) == 0
