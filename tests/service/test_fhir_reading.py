"""Read, vread, history and how answers are asked for, by the rows of FHIR's http page."""

from __future__ import annotations

import re
from typing import Any

import pytest
from fastapi import FastAPI
from starlette.testclient import TestClient

from fhirgallop.conformance.validator import validate
from fhirgallop.outcome import has_errors

FHIR = "application/fhir+json"


@pytest.fixture
def one(still: TestClient, of_patient: dict[str, str]) -> dict[str, Any]:
    """The heart rate of the example, as it is given out."""
    found = still.get("/fhir/r4/Observation", params={**of_patient, "code": "http://loinc.org|8867-4"})
    (entry,) = found.json()["entry"]
    resource: dict[str, Any] = entry["resource"]
    return resource


def rules(answer: Any) -> list[str]:
    outcome = answer.json()
    assert outcome["resourceType"] == "OperationOutcome"
    assert answer.headers["content-type"] == FHIR
    return [issue["details"]["coding"][0]["code"] for issue in outcome["issue"]]


def test_a_read_has_version_and_moment(still: TestClient, one: dict[str, Any]) -> None:
    answer = still.get(f"/fhir/r4/Observation/{one['id']}")
    assert answer.status_code == 200
    assert answer.headers["content-type"] == FHIR
    assert answer.headers["etag"] == 'W/"1"'
    assert answer.headers["last-modified"].endswith(" GMT")
    assert answer.json() == one
    assert one["meta"]["versionId"] == "1"
    assert re.fullmatch(r"2026-12-01T08:\d\d:00\.000Z", one["meta"]["lastUpdated"])
    assert not has_errors(validate(answer.content))


def test_every_resource_of_an_examination_is_here_and_conforms(still: TestClient) -> None:
    count = {"Observation": 34, "DiagnosticReport": 1, "Provenance": 1}
    for type_, expected in count.items():
        found = still.get(f"/fhir/r4/{type_}?_count=200").json()["entry"]
        assert len(found) == expected
        for entry in found:
            assert entry["fullUrl"].endswith(f"/fhir/r4/{type_}/{entry['resource']['id']}")
            assert not has_errors(validate(entry["resource"]))


def test_references_lead_to_what_is_here(still: TestClient) -> None:
    (report,) = still.get("/fhir/r4/DiagnosticReport").json()["entry"]
    panel = still.get(f"/fhir/r4/{report['resource']['result'][0]['reference']}").json()
    members = [member["reference"] for member in panel["hasMember"]]
    assert len(members) == 33
    assert all(still.get(f"/fhir/r4/{member}").status_code == 200 for member in members)
    (trail,) = still.get("/fhir/r4/Provenance").json()["entry"]
    targets = {target["reference"] for target in trail["resource"]["target"]}
    assert {*members, f"DiagnosticReport/{report['resource']['id']}"} < targets


def test_decimals_keep_their_digits(client: TestClient, example: Any) -> None:
    record = example(vitals={"weight": "81.50"})
    client.post("/exams", params={"map": "fernwood-heart-form"}, json=record)
    found = client.get("/fhir/r4/Observation", params={"code": "http://loinc.org|29463-7"})
    assert b'"value":81.50,' in found.content


def test_what_changes_gets_a_version_and_the_rest_none(examined: TestClient, example: Any) -> None:
    changed = example(heart={"s4": "no"})
    examined.post("/exams", params={"map": "fernwood-heart-form"}, json=changed)
    versions = {
        entry["resource"]["code"]["text"]: entry["resource"]["meta"]["versionId"]
        for entry in examined.get("/fhir/r4/Observation?_count=200").json()["entry"]
    }
    assert versions["Fourth heart sound"] == "2"
    assert versions["Heart rate"] == "1"


def test_history_holds_every_version(examined: TestClient, example: Any) -> None:
    for value in ("no", "yes", "no"):
        record = example(heart={"s4": value})
        examined.post("/exams", params={"map": "fernwood-heart-form"}, json=record)
    code = "https://fhirgallop.org/fhir/CodeSystem/findings|heart-sound.s4"
    (found,) = examined.get("/fhir/r4/Observation", params={"code": code}).json()["entry"]
    address = f"/fhir/r4/Observation/{found['resource']['id']}"
    bundle = examined.get(f"{address}/_history").json()
    assert not has_errors(validate(bundle))
    assert bundle["total"] == 4
    assert [entry["resource"]["meta"]["versionId"] for entry in bundle["entry"]] == ["4", "3", "2", "1"]
    assert [entry["request"]["method"] for entry in bundle["entry"]] == ["PUT", "PUT", "PUT", "POST"]
    statuses = [entry["resource"]["status"] for entry in bundle["entry"]]
    assert statuses == ["amended", "amended", "amended", "final"]
    second = examined.get(f"{address}/_history/2")
    assert second.json() == bundle["entry"][2]["resource"]
    assert second.headers["etag"] == 'W/"2"'
    paged: list[str] = []
    url = f"{address}/_history?_count=3"
    while url:
        page = examined.get(url).json()
        paged += [entry["resource"]["meta"]["versionId"] for entry in page["entry"]]
        url = next((link["url"] for link in page["link"] if link["relation"] == "next"), "")
    assert paged == ["4", "3", "2", "1"]
    since = bundle["entry"][1]["resource"]["meta"]["lastUpdated"]
    later = examined.get(f"{address}/_history", params={"_since": since}).json()
    assert [entry["resource"]["meta"]["versionId"] for entry in later["entry"]] == ["4", "3"]


@pytest.mark.parametrize(
    ("path", "status", "rule"),
    [
        ("Observation/nobody", 404, "http-unknown-resource"),
        ("Observation/no%20id", 404, "http-unknown-resource"),
        ("Observation/..%2f..%2fetc", 404, "http-404"),
        ("Observation/' or 1=1 --", 404, "http-unknown-resource"),
        ("Observation/nobody/_history", 404, "http-unknown-resource"),
        ("Observation/nobody/_history/1", 404, "http-unknown-resource"),
        ("Patient/1", 404, "http-unknown-type"),
        ("Nonsense/1", 404, "http-unknown-type"),
        ("Nonsense", 404, "http-unknown-type"),
        ("Observation/nobody?_summary=true", 400, "http-unknown-parameter"),
    ],
)
def test_what_is_not_here(still: TestClient, path: str, status: int, rule: str) -> None:
    answer = still.get(f"/fhir/r4/{path}")
    assert (answer.status_code, rules(answer)) == (status, [rule])


@pytest.mark.parametrize("version", ["0", "2", "99999999999", "x", "-1", "1 or 1=1"])
def test_versions_that_are_not_here(still: TestClient, one: dict[str, Any], version: str) -> None:
    answer = still.get(f"/fhir/r4/Observation/{one['id']}/_history/{version}")
    assert answer.status_code == 404


def test_each_edition_has_its_own(still: TestClient, one: dict[str, Any]) -> None:
    assert still.get(f"/fhir/r5/Observation/{one['id']}").status_code == 404
    assert "entry" not in still.get("/fhir/r4b/Observation").json()
    assert still.get("/fhir/r6/Observation").status_code == 400


@pytest.mark.parametrize(
    ("headers", "status"),
    [
        ({"If-None-Match": 'W/"1"'}, 304),
        ({"If-None-Match": '"1"'}, 304),
        ({"If-None-Match": 'W/"7", W/"1"'}, 304),
        ({"If-None-Match": 'W/"2"'}, 200),
        ({"If-Modified-Since": "Tue, 01 Dec 2026 23:00:00 GMT"}, 304),
        ({"If-Modified-Since": "Mon, 30 Nov 2026 08:00:00 GMT"}, 200),
        ({"If-Modified-Since": "yesterday"}, 200),
        ({"If-None-Match": 'W/"2"', "If-Modified-Since": "Tue, 01 Dec 2026 23:00:00 GMT"}, 200),
    ],
)
def test_conditional_read(
    still: TestClient, one: dict[str, Any], headers: dict[str, str], status: int
) -> None:
    answer = still.get(f"/fhir/r4/Observation/{one['id']}", headers=headers)
    assert answer.status_code == status
    assert bool(answer.content) is (status == 200)
    assert answer.headers["etag"] == 'W/"1"'


@pytest.mark.parametrize(
    ("query", "accept", "status", "kind"),
    [
        ("", "application/fhir+json", 200, FHIR),
        ("", "application/json", 200, "application/json"),
        ("", "*/*", 200, FHIR),
        ("", "application/fhir+xml", 406, FHIR),
        ("", "text/html", 406, FHIR),
        ("", "application/fhir+xml, application/fhir+json;q=0.5", 200, FHIR),
        ("", "application/json;q=0.4, application/fhir+json;q=0.9", 200, FHIR),
        ("", "application/fhir+json;q=0", 406, FHIR),
        ("", "application/fhir+json; fhirVersion=4.0", 200, FHIR),
        ("", "application/fhir+json; fhirVersion=5.0", 406, FHIR),
        ("", "application/fhir+json; fhirVersion=3.0, application/fhir+json; fhirVersion=4.0", 200, FHIR),
        ("_format=json", "application/fhir+xml", 200, FHIR),
        ("_format=application/fhir+json", "text/html", 200, FHIR),
        ("_format=application/json", FHIR, 200, "application/json"),
        ("_format=xml", FHIR, 406, FHIR),
        ("_format=", FHIR, 406, FHIR),
    ],
)
def test_what_is_answered_is_what_was_asked_for(
    still: TestClient, one: dict[str, Any], query: str, accept: str, status: int, kind: str
) -> None:
    answer = still.get(f"/fhir/r4/Observation/{one['id']}?{query}", headers={"Accept": accept})
    assert (answer.status_code, answer.headers["content-type"]) == (status, kind)


def test_the_version_parameter_is_of_the_edition(client: TestClient) -> None:
    for edition, version in (("r4", "4.0"), ("r4b", "4.3"), ("r5", "5.0")):
        headers = {"Accept": f"{FHIR}; fhirVersion={version}"}
        assert client.get(f"/fhir/{edition}/Observation", headers=headers).status_code == 200


def test_laid_out_for_people(still: TestClient, one: dict[str, Any]) -> None:
    answer = still.get(f"/fhir/r4/Observation/{one['id']}?_pretty=true")
    assert answer.text.startswith('{\n  "resourceType"')
    assert answer.json() == one


@pytest.mark.parametrize("method", ["DELETE", "PATCH", "OPTIONS"])
def test_methods_that_are_not_offered(still: TestClient, one: dict[str, Any], method: str) -> None:
    answer = still.request(method, f"/fhir/r4/Observation/{one['id']}")
    assert answer.status_code == 405
    assert answer.headers["allow"] == "GET, HEAD, PUT"


def test_the_head_of_an_answer_can_be_asked_for_alone(still: TestClient, one: dict[str, Any]) -> None:
    address = f"/fhir/r4/Observation/{one['id']}"
    whole, head = still.get(address), still.head(address)
    assert (head.status_code, head.content) == (200, b"")
    for name in ("etag", "last-modified", "content-type", "content-length"):
        assert head.headers[name] == whole.headers[name]


def test_the_public_address_stands_in_every_link(
    examined: TestClient, application: FastAPI, one: dict[str, Any]
) -> None:
    settings = application.state.settings.model_copy(update={"address": "https://gallop.example/base"})
    application.state.settings = settings
    bundle = examined.get("/fhir/r4/Observation?_count=1").json()
    assert all(link["url"].startswith("https://gallop.example/base/fhir/r4/") for link in bundle["link"])
    assert bundle["entry"][0]["fullUrl"].startswith("https://gallop.example/base/fhir/r4/Observation/")
