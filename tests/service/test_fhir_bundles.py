"""Transaction and batch: all or none, references, conditions, and what each entry is answered.

Sources: FHIR R4 http.html, "batch/transaction"; the numbered interoperability requirements (FR-13 to FR-16).
"""

from __future__ import annotations

from copy import deepcopy
from typing import Any

import pytest
from starlette.testclient import TestClient

from fhirgallop.conformance.validator import validate
from fhirgallop.outcome import has_errors
from fhirgallop.service.auth.caller import Caller
from fhirgallop.service.auth.scopes import read_scopes
from fhirgallop.service.fhir import bundles

FHIR = {"Content-Type": "application/fhir+json"}
URN = "urn:uuid:5f0c0d7e-7c1b-4a4e-8f2e-0d8a4c1b2a3f"


def send(client: TestClient, bundle: dict[str, Any], status: int = 200, **headers: str) -> dict[str, Any]:
    answer = client.post("/fhir/r4", json=bundle, headers={**FHIR, **headers})
    assert answer.status_code == status, answer.text
    told: dict[str, Any] = answer.json()
    if status == 200:
        assert not has_errors(validate(told))
    return told


def of(kind: str, *entries: dict[str, Any]) -> dict[str, Any]:
    return {"resourceType": "Bundle", "type": kind, "entry": list(entries)}


def post(resource: dict[str, Any], url: str = "", **request: str) -> dict[str, Any]:
    asked = {"method": "POST", "url": resource["resourceType"], **request}
    return {**({"fullUrl": url} if url else {}), "resource": resource, "request": asked}


def statuses(told: dict[str, Any]) -> list[str]:
    return [entry["response"]["status"] for entry in told["entry"]]


def count(client: TestClient, type_: str = "Observation") -> int:
    total: int = client.get(f"/fhir/r4/{type_}?_total=accurate&_count=0").json()["total"]
    return total


def test_a_bundle_coded_elsewhere_is_loaded_once(client: TestClient, coded_bundle: dict[str, Any]) -> None:
    first, again = send(client, coded_bundle), send(client, coded_bundle)
    assert set(statuses(first)) == {"201 Created"}
    assert set(statuses(again)) == {"200 OK"}
    assert len(first["entry"]) == len(coded_bundle["entry"])
    for entry, sent in zip(first["entry"], coded_bundle["entry"], strict=True):
        assert entry["response"]["etag"] == 'W/"1"'
        assert f"/{sent['resource']['resourceType']}/" in entry["response"]["location"]
        assert client.get(entry["response"]["location"]).status_code == 200
    assert (count(client), count(client, "Provenance")) == (34, 1)


def test_what_was_loaded_is_what_posting_the_examination_gives(
    client: TestClient, coded_bundle: dict[str, Any], example: Any
) -> None:
    send(client, coded_bundle)
    client.post("/exams", params={"map": "fernwood-heart-form"}, json=example())
    for entry in client.get("/fhir/r4/Observation?_count=200").json()["entry"]:
        history = client.get(f"{entry['fullUrl']}/_history").json()
        new, old = (dict(one["resource"]) for one in history["entry"])
        # the moment of coding is all that differs
        assert {k for k in new if new[k] != old.get(k)} == {"issued", "meta"}


def test_references_are_turned_everywhere_but_in_canonicals(
    client: TestClient, observation: dict[str, Any]
) -> None:
    pointing = deepcopy(observation)
    del pointing["identifier"]
    pointing["derivedFrom"] = [{"reference": URN}]
    pointing["extension"] = [
        {"url": "https://a.example/uri", "valueUri": URN},
        {"url": "https://a.example/url", "valueUrl": URN},
        {"url": "https://a.example/canonical", "valueCanonical": URN},
        {"url": "https://a.example/text", "valueString": URN},
    ]
    pointing["text"] = {
        "status": "generated",
        "div": f'<div xmlns="http://www.w3.org/1999/xhtml"><a href="{URN}">{URN}</a></div>',
    }
    told = send(client, of("transaction", post(pointing), post(observation, URN)))
    made, target = (entry["response"]["location"].split("/_history")[0] for entry in told["entry"])
    new = "Observation/" + target.rpartition("/")[2]
    kept = client.get(made).json()
    assert kept["derivedFrom"] == [{"reference": new}]
    values = [next(v for k, v in one.items() if k != "url") for one in kept["extension"]]
    assert values == [new, new, URN, URN]
    assert f'<a href="{new}">{URN}</a>' in kept["text"]["div"]


def test_a_reference_to_what_is_there_already(client: TestClient, observation: dict[str, Any]) -> None:
    """A create whose condition is met still lends its name to the others."""
    condition = "identifier=https://fernwood.example/results|R-1"
    (first,) = send(client, of("transaction", post(observation)))["entry"]
    pointing = {**observation, "identifier": [], "derivedFrom": [{"reference": URN}]}
    del pointing["identifier"]
    told = send(client, of("transaction", post(observation, URN, ifNoneExist=condition), post(pointing)))
    assert statuses(told) == ["200 OK", "201 Created"]
    assert told["entry"][0]["response"]["location"] == first["response"]["location"]
    kept = client.get(told["entry"][1]["response"]["location"]).json()
    assert kept["derivedFrom"][0]["reference"] in first["response"]["location"]


@pytest.mark.parametrize(
    ("reference", "status"),
    [
        ("Observation?identifier=https://fernwood.example/results|R-1", 200),
        ("Observation?identifier=https://fernwood.example/results|R-2", 412),
        ("Observation?code=8867-4", 412),
        ("Observation?nonsense=1", 400),
        ("Patient?identifier=7", 404),
    ],
)
def test_conditional_references(
    client: TestClient, observation: dict[str, Any], reference: str, status: int
) -> None:
    other = {**observation, "identifier": [{"value": "other"}]}
    send(client, of("transaction", post(observation), post(other)))
    pointing = {**other, "identifier": [{"value": "third"}], "derivedFrom": [{"reference": reference}]}
    told = send(client, of("transaction", post(pointing)), status)
    assert count(client) == (3 if status == 200 else 2)
    if status == 200:
        kept = client.get(told["entry"][0]["response"]["location"]).json()
        assert kept["derivedFrom"][0]["reference"].startswith("Observation/")


@pytest.mark.parametrize(
    ("broken", "status"),
    [
        ({"resource": {"resourceType": "Observation", "status": "bogus", "code": {"text": "x"}},
          "request": {"method": "POST", "url": "Observation"}}, 422),
        ({"resource": {"resourceType": "Patient"}, "request": {"method": "POST", "url": "Patient"}}, 404),
        ({"request": {"method": "DELETE", "url": "Observation/1"}}, 405),
        ({"request": {"method": "GET", "url": "Observation/nobody"}}, 404),
        ({"request": {"method": "GET", "url": "../../etc/passwd"}}, 400),
        ({"request": {"method": "GET", "url": "https://elsewhere.example/Observation/1"}}, 400),
        ({"resource": {"resourceType": "Observation", "id": "x", "status": "final", "code": {"text": "x"}},
          "request": {"method": "PUT", "url": "Observation/x"}}, 405),
        ({"resource": {"resourceType": "Observation", "status": "final", "code": {"text": "x"}},
          "request": {"method": "POST", "url": "Observation", "ifNoneExist": "code=x,8867-4"}}, 200),
    ],
)  # fmt: skip
def test_all_or_nothing(
    client: TestClient, observation: dict[str, Any], broken: dict[str, Any], status: int
) -> None:
    told = send(client, of("transaction", post(observation), broken), status)
    if status == 200:
        assert count(client) == 2
        return
    assert told["resourceType"] == "OperationOutcome"
    assert any(one.startswith("Bundle.entry[1]") for one in told["issue"][0]["expression"])
    assert count(client) == 0


def test_two_entries_do_not_mean_the_same(client: TestClient, coded_bundle: dict[str, Any]) -> None:
    first = coded_bundle["entry"][0]
    told = send(client, of("transaction", first, {**deepcopy(first), "fullUrl": URN}), 400)
    assert told["issue"][0]["details"]["coding"][0]["code"] == "transaction-overlap"
    assert count(client) == 0


def test_reads_see_what_was_written(client: TestClient, observation: dict[str, Any]) -> None:
    read = {
        "request": {"method": "GET", "url": "Observation?identifier=https://fernwood.example/results|R-1"}
    }
    told = send(client, of("transaction", read, post(observation)))
    assert statuses(told) == ["200 OK", "201 Created"]
    assert told["entry"][0]["resource"]["total"] == 1


def test_prefer(client: TestClient, observation: dict[str, Any]) -> None:
    whole = send(client, of("transaction", post(observation)), Prefer="return=representation")
    assert whole["entry"][0]["resource"]["meta"]["versionId"] == "1"
    bare = send(client, of("transaction", post(observation)), Prefer="return=minimal")
    assert "resource" not in bare["entry"][0]
    outcome = send(client, of("transaction", post(observation)), Prefer="return=OperationOutcome")
    assert outcome["entry"][0]["response"]["outcome"]["resourceType"] == "OperationOutcome"


def test_if_match_of_an_entry(client: TestClient, observation: dict[str, Any]) -> None:
    (made,) = send(client, of("transaction", post(observation)))["entry"]
    fhir_id = made["response"]["location"].split("/")[-3]
    changed = {**observation, "id": fhir_id, "status": "amended"}

    def put(version: str) -> dict[str, Any]:
        request = {"method": "PUT", "url": f"Observation/{fhir_id}", "ifMatch": f'W/"{version}"'}
        return {"resource": changed, "request": request}

    send(client, of("transaction", put("2")), 412)
    assert statuses(send(client, of("transaction", put("1")))) == ["200 OK"]


def test_a_batch_is_each_for_itself(client: TestClient, observation: dict[str, Any]) -> None:
    dependent = {**observation, "identifier": [{"value": "x"}], "derivedFrom": [{"reference": URN}]}
    told = send(
        client,
        of(
            "batch",
            post(observation, URN),
            {"request": {"method": "GET", "url": "Observation/nobody"}},
            post({**observation, "status": "bogus"}),
            {"request": {"method": "DELETE", "url": "Observation/1"}},
            post(dependent),
            {"request": {"method": "GET", "url": "Observation?code=8867-4&_total=accurate"}},
            post(observation, ifNoneExist="identifier=https://fernwood.example/results|R-1"),
        ),
    )
    assert [one[:3] for one in statuses(told)] == ["201", "404", "422", "405", "400", "200", "200"]
    for entry in told["entry"]:
        failed = entry["response"]["status"][:1] == "4"
        assert ("outcome" in entry["response"]) is failed
    assert told["entry"][5]["resource"]["total"] == 1
    assert count(client) == 1


def test_only_transactions_and_batches_are_taken(client: TestClient, coded_bundle: dict[str, Any]) -> None:
    for kind in ("collection", "document", "searchset", "history"):
        send(client, {**coded_bundle, "type": kind}, 400)
    send(client, coded_bundle["entry"][0]["resource"], 400)
    send(client, {"resourceType": "Bundle", "type": "batch", "entry": {"a": 1}}, 400)
    assert send(client, {"resourceType": "Bundle", "type": "transaction"}) == {
        "resourceType": "Bundle", "type": "transaction-response",
    }  # fmt: skip


def test_too_many_entries(client: TestClient, observation: dict[str, Any], monkeypatch: Any) -> None:
    monkeypatch.setattr(bundles, "MOST_ENTRIES", 3)
    told = send(client, of("batch", *([post(observation)] * 4)), 413)
    assert told["issue"][0]["code"] == "too-costly"
    assert count(client) == 0


class _Let:
    """Lets a caller in who has certain scopes."""

    closed = True

    def __init__(self, scopes: str) -> None:
        self._caller = Caller("system", "somebody", scopes=read_scopes(scopes))

    async def admit(self, _request: Any, _need: Any) -> Caller:
        return self._caller

    def close(self) -> None:
        pass


def test_each_entry_needs_its_own_scope(
    client: TestClient, application: Any, observation: dict[str, Any]
) -> None:
    read = {"request": {"method": "GET", "url": "Observation?code=8867-4"}}
    application.state.gate = _Let("system/Observation.rs")
    send(client, of("transaction", post(observation), read), 403)
    told = send(client, of("batch", post(observation), read))
    assert [one[:3] for one in statuses(told)] == ["403", "200"]
    application.state.gate = _Let("system/Observation.c")
    told = send(client, of("batch", post(observation), read))
    assert [one[:3] for one in statuses(told)] == ["201", "403"]
    # a conditional update creates where there is nothing yet, so it needs both
    application.state.gate = _Let("system/Observation.u")
    upsert = {"resource": {**observation, "identifier": [{"system": "https://a.example", "value": "n"}]},
              "request": {"method": "PUT", "url": "Observation?identifier=https://a.example|n"}}  # fmt: skip
    assert [one[:3] for one in statuses(send(client, of("batch", upsert)))] == ["403"]
    application.state.gate = _Let("system/Observation.cu")
    assert [one[:3] for one in statuses(send(client, of("batch", upsert)))] == ["201"]


def test_a_scope_for_one_category_shows_no_other(client: TestClient, application: Any, example: Any) -> None:
    client.post("/exams", params={"map": "fernwood-heart-form"}, json=example())
    every = client.get("/fhir/r4/Observation?_count=200").json()["entry"]
    category = "http://terminology.hl7.org/CodeSystem/observation-category|vital-signs"
    application.state.gate = _Let(f"system/Observation.rs?category={category}")
    found = client.get("/fhir/r4/Observation?_count=200&_total=accurate").json()
    kinds = {one["resource"]["category"][0]["coding"][0]["code"] for one in found["entry"]}
    assert kinds == {"vital-signs"}
    assert found["total"] == len(found["entry"]) < len(every)
    for entry in every:
        seen = entry["resource"]["category"][0]["coding"][0]["code"] == "vital-signs"
        for tail in ("", "/_history", "/_history/1"):
            answer = client.get(entry["fullUrl"] + tail)
            assert answer.status_code == (200 if seen else 404)
