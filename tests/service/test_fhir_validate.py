"""$validate in its modes, of a type and of one resource (VA-1 to VA-8, VA-15)."""

from __future__ import annotations

from typing import Any

import pytest
from starlette.testclient import TestClient

from fhirgallop.service.auth.caller import Caller
from fhirgallop.service.auth.scopes import read_scopes

FHIR = {"Content-Type": "application/fhir+json"}
BASE = "/fhir/r4/Observation"


@pytest.fixture
def one(examined: TestClient) -> dict[str, Any]:
    found = examined.get(BASE, params={"code": "http://loinc.org|8867-4"}).json()
    resource: dict[str, Any] = found["entry"][0]["resource"]
    return resource


def asked(client: TestClient, address: str, resource: Any, mode: str = "") -> Any:
    parameters = [{"name": "resource", "resource": resource}] if resource else []
    if mode:
        parameters.append({"name": "mode", "valueCode": mode})
    body = {"resourceType": "Parameters", "parameter": parameters}
    return client.post(f"{address}/$validate", json=body, headers=FHIR)


def rules(answer: Any) -> set[str]:
    outcome = answer.json()
    assert outcome["resourceType"] == "OperationOutcome"
    assert outcome["issue"]
    return {
        issue["details"]["coding"][0]["code"] for issue in outcome["issue"] if "coding" in issue["details"]
    }


def errors(answer: Any) -> set[str]:
    assert answer.status_code == 200
    return {
        issue["details"]["coding"][0]["code"]
        for issue in answer.json()["issue"]
        if issue["severity"] in ("error", "fatal")
    }


def test_mode_create_asks_for_uniqueness(examined: TestClient, one: dict[str, Any]) -> None:
    assert errors(asked(examined, BASE, one)) == set()
    assert errors(asked(examined, BASE, one, "create")) == {"resource-duplicate"}
    new = {
        **one,
        "identifier": [{**one["identifier"][0], "value": "urn:uuid:00000000-0000-4000-8000-000000000000"}],
    }
    assert errors(asked(examined, BASE, new, "create")) == set()
    assert errors(asked(examined, BASE, one, "profile")) == set()
    by_address = examined.post(f"{BASE}/$validate?mode=create", json=one, headers=FHIR)
    assert errors(by_address) == {"resource-duplicate"}


def test_mode_update_asks_for_what_is_here(examined: TestClient, one: dict[str, Any]) -> None:
    address = f"{BASE}/{one['id']}"
    assert errors(asked(examined, address, one, "update")) == set()
    other = {**one, "id": "other", "identifier": [], "meta": {**one["meta"], "versionId": "9"}}
    assert {"http-other-id", "resource-identity", "http-version-conflict"} <= errors(
        asked(examined, address, other, "update")
    )
    # without the mode nothing is compared
    assert "http-other-id" not in errors(asked(examined, address, {**one, "id": "other"}))


def test_mode_delete_says_that_nothing_is_deleted(examined: TestClient, one: dict[str, Any]) -> None:
    answer = asked(examined, f"{BASE}/{one['id']}", None, "delete")
    assert errors(answer) == {"validate-no-delete"}


@pytest.mark.parametrize(
    ("tail", "resource", "mode", "status"),
    [
        ("", True, "update", 400),
        ("", False, "delete", 400),
        ("", True, "nonsense", 400),
        ("", False, "", 400),
        ("/nobody", True, "update", 404),
        ("/nobody", False, "delete", 404),
    ],
)
def test_what_cannot_be_run(
    examined: TestClient, one: dict[str, Any], tail: str, resource: bool, mode: str, status: int
) -> None:
    answer = asked(examined, BASE + tail, one if resource else None, mode)
    assert answer.status_code == status
    assert rules(answer)


def test_two_modes_that_differ(examined: TestClient, one: dict[str, Any]) -> None:
    body = {"resourceType": "Parameters", "parameter": [{"name": "resource", "resource": one},
                                                        {"name": "mode", "valueCode": "create"}]}  # fmt: skip
    twice = examined.post(f"{BASE}/$validate?mode=profile", json=body, headers=FHIR)
    assert twice.status_code == 400
    strange = {"resourceType": "Parameters", "parameter": [{"name": "usageContext", "valueCode": "x"}]}
    assert examined.post(f"{BASE}/$validate", json=strange, headers=FHIR).status_code == 400


def test_nothing_is_kept(examined: TestClient, one: dict[str, Any]) -> None:
    asked(examined, f"{BASE}/{one['id']}", {**one, "status": "amended"}, "update")
    assert examined.get(f"{BASE}/{one['id']}").json() == one


def test_who_may_not_see_a_resource_learns_nothing_of_it(
    examined: TestClient, application: Any, one: dict[str, Any]
) -> None:
    caller = Caller("system", "somebody", scopes=read_scopes("system/DiagnosticReport.rs"))

    class Let:
        closed = True

        async def admit(self, _request: Any, _need: Any) -> Caller:
            return caller

        def close(self) -> None:
            pass

    application.state.gate = Let()
    assert asked(examined, f"{BASE}/{one['id']}", one, "update").status_code == 404
    created = asked(examined, BASE, one, "create")
    assert "resource-duplicate" not in rules(created)
    assert "validate-uniqueness" in rules(created)


def test_places_resolve_and_order_is_stable(examined: TestClient, one: dict[str, Any]) -> None:
    """VA-6, VA-15: each expression names one node of what was sent; worst first, none twice."""
    broken = {**one, "status": "bogus", "dataAbsentReason": {"text": "x"}, "category": [{"coding": [{}]}]}
    answers = [asked(examined, BASE, broken).json() for _ in range(2)]
    assert answers[0] == answers[1]
    issues = answers[0]["issue"]
    order = ["fatal", "error", "warning", "information"]
    severities = [order.index(issue["severity"]) for issue in issues]
    assert severities == sorted(severities)
    assert len({str(issue) for issue in issues}) == len(issues)
    expressions = {issue["expression"][0] for issue in issues if "expression" in issue}
    assert len(expressions) > 2
    assert not any("location" in issue for issue in issues)
    text = str(issues)
    assert "F-20417" not in text  # VA-8: no value of the record


def test_the_body_of_another_edition(examined: TestClient, one: dict[str, Any]) -> None:
    headers = {"Content-Type": "application/fhir+json; fhirVersion=5.0"}
    assert examined.post(f"{BASE}/$validate", json=one, headers=headers).status_code == 415
    assert examined.post("/fhir/r5/Observation/$validate", json=one, headers=headers).status_code == 200


def test_codes_that_nobody_can_judge_here_are_named(still: TestClient, observation: dict[str, Any]) -> None:
    """VA-12, VA-13: not loaded is neither valid nor wrong."""
    answer = asked(still, BASE, observation)
    assert errors(answer) == set()
    said = {issue["details"]["text"]: issue for issue in answer.json()["issue"]}
    (snomed,) = [issue for words, issue in said.items() if "SNOMED CT" in words]
    assert (snomed["severity"], snomed["code"]) == ("information", "incomplete")
    observation["code"]["coding"][0]["version"] = "http://snomed.info/sct/900000000000207008/version/19000101"
    versioned = asked(still, BASE, observation).json()["issue"]
    (issue,) = [one for one in versioned if "SNOMED CT" in one["details"]["text"]]
    assert (issue["severity"], issue["code"], issue["expression"]) == (
        "warning",
        "not-found",
        ["Observation"],
    )
