"""AuditEvents: sound FHIR, by the patterns of IHE BALP, kept before the answer leaves, or there is no answer.

Published facts, from IHE Basic Audit Log Patterns 1.1.3 (profiles Read, Create, OAUTHaccessTokenUse.Opaque):
type `rest`, subtype from FHIR's RESTful interactions, action by kind of access, client and server by the
DICOM codes 110153 (source of the data) and 110152 (destination), an X-Request-Id
entity, of a token the end only.
"""

from __future__ import annotations

import base64
import json
from pathlib import Path
from typing import Any

import pytest
from fastapi import FastAPI
from sqlalchemy import text
from starlette.testclient import TestClient

from fhirgallop import settings
from fhirgallop.conformance.validator import validate
from fhirgallop.outcome import Issue
from fhirgallop.service.app import create_app
from fhirgallop.service.audit import _end
from fhirgallop.service.audit_event import Deed, Ending, Who, audit_event
from fhirgallop.storage.audit import AuditTrail
from fhirgallop.storage.keys import patient_key

WHERE = "/exams?map=fernwood-heart-form"
DICOM = "http://dicom.nema.org/resources/ontology/DCM"
REQUEST = "0b7c1c1e-5d2e-4f5a-9a37-0d2f6c1f7a11"
DIGEST = patient_key("https://fernwood.example/patients", "F-20417")


def trail(application: FastAPI) -> list[dict[str, Any]]:
    """Every event that was kept."""
    kept = AuditTrail(application.state.readiness.engine)
    return [json.loads(row.event) for row in kept.read()]


def codes(coded: dict[str, Any]) -> set[tuple[str, str]]:
    return {(one["system"], one["code"]) for one in coded["coding"]}


def sound(event: dict[str, Any]) -> None:
    """The judge finds nothing wrong."""
    found = [issue for issue in validate(event, "R4") if issue.is_error]
    assert not found, found


_LOGIN = (Issue("error", "login", "auth-login", "Present F-20417"),)
_MANY = (Issue("fatal", "transient", "storage-failed", "x"),) * 50


@pytest.mark.parametrize("edition", ["R4", "R4B"])
@pytest.mark.parametrize(
    ("deed", "who", "ending"),
    [
        (
            Deed("R", "read", (DIGEST,), ("List/1",)),
            Who("https://a.example", address="::1"),
            Ending(),
        ),
        (Deed("C", "operation", (DIGEST,), ("urn:uuid:" + REQUEST,)), Who(), Ending()),
        (Deed("R", "search-type", (), (), ("patient", "date")), Who("app", token="c2Vj"), Ending()),
        (Deed("U", "update"), Who("ann", person=True, token="t-1", address="::1"), Ending()),
        (Deed("E", "operation"), Who(), Ending(401, _LOGIN)),
        (Deed("E", "operation"), Who(), Ending(503, _MANY)),
    ],
)
def test_pr_8_every_kind_of_event_is_sound(
    deed: Deed, who: Who, ending: Ending, edition: Any, moment: Any
) -> None:
    event = audit_event(deed, who, ending, at=moment, id_=REQUEST, request=REQUEST, patient=DIGEST)
    assert not [issue for issue in validate(event, edition) if issue.is_error]
    assert sum(agent["requestor"] for agent in event["agent"]) == 1
    assert "F-20417" not in json.dumps(event), "an issue stands in the trail by its codes alone"


def test_pr_8_source_and_destination_follow_the_data(moment: Any) -> None:
    def roles(action: Any) -> list[set[tuple[str, str]]]:
        event = audit_event(Deed(action, "x"), Who(), Ending(), at=moment, id_="a", request="")
        return [codes(agent["type"]) for agent in event["agent"]]

    assert roles("R") == [{(DICOM, "110152")}, {(DICOM, "110153")}]
    for action in "CUDE":
        assert roles(action) == [{(DICOM, "110153")}, {(DICOM, "110152")}]


def test_pr_8_of_a_token_only_a_part_is_kept() -> None:
    long = "".join(chr(33 + n % 90) for n in range(500))
    assert _end(long) == long[-32:]
    assert _end("0123456789") == "56789", "of a short token not the whole"
    assert _end("") == ""


def test_pr_8_an_examination_leaves_one_event(application: FastAPI, client: Any, example: Any) -> None:
    answer = client.post(WHERE, json=example(), headers={"X-Request-Id": REQUEST})
    assert answer.status_code == 200
    (event,) = trail(application)
    sound(event)
    assert event["action"] in {"C", "E"}
    assert event["outcome"] == "0"
    entities = event["entity"]
    assert REQUEST in {entity["what"].get("identifier", {}).get("value") for entity in entities}
    assert "F-20417" not in json.dumps(event)


def test_pr_9_a_refusal_is_kept_with_its_outcome(application: FastAPI, client: Any, example: Any) -> None:
    refused = client.post(WHERE, json=example(vitals={"hr": "seventy-eight"}))
    assert refused.status_code == 422
    (event,) = trail(application)
    sound(event)
    assert (event["outcome"], event["outcomeDesc"]) == ("4", "HTTP 422")
    told = {issue["details"]["coding"][0]["code"] for issue in refused.json()["issue"]}
    (contained,) = event["contained"]
    assert {issue["details"]["coding"][0]["code"] for issue in contained["issue"]} <= told
    assert "seventy" not in json.dumps(event)


def test_what_touches_no_patient_leaves_no_event(application: FastAPI, client: Any) -> None:
    for path in ("/health", "/ready", "/docs", "/openapi.json", "/maps", "/metrics", "/nowhere"):
        client.get(path)
    assert trail(application) == []


def test_without_a_trail_there_is_no_answer(application: FastAPI, client: Any, example: Any) -> None:
    with application.state.readiness.engine.begin() as connection:
        connection.execute(text("DROP TABLE audit"))
    answer = client.post(WHERE, json=example())
    assert answer.status_code == 503
    assert answer.headers["retry-after"]
    assert answer.json()["issue"][0]["details"]["coding"][0]["code"] in {"audit-failed", "storage-failed"}
    assert "bundle" not in answer.json()
    assert "valueQuantity" not in answer.text
    refused = client.post(WHERE, json={"nonsense": 1})
    assert refused.status_code == 422, "a refusal gives nothing away, and is told"
    assert application.state.audit.failures >= 1
    assert "fhirgallop_audit_failures 0" not in client.get("/metrics").text


def test_what_breaks_in_the_trail_itself_is_no_answer_either(
    application: FastAPI, client: Any, hook_call: Any, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("fhirgallop.service.audit.audit_event", lambda *_, **__: 1 / 0)
    for answer, status, rule in (
        (client.get("/cds-services"), 503, "audit-failed"),
        # cards are kept in one transaction with their event
        (client.post("/cds-services/exam-review-patient-view", json=hook_call()), 500, "service-broke"),
    ):
        assert (answer.status_code, set(answer.json())) == (status, {"resourceType", "issue"})
        assert answer.json()["issue"][0]["details"]["coding"][0]["code"] == rule
    assert client.post("/cds-services/exam-review-patient-view", json={}).status_code == 400


def test_events_are_found_by_patient_and_time(application: FastAPI, client: Any, example: Any) -> None:
    client.post(WHERE, json=example())
    client.post(WHERE, json={"nonsense": 1})
    kept = AuditTrail(application.state.readiness.engine)
    rows = list(kept.read())
    assert len(rows) == 2
    assert len(list(kept.read(since=rows[1].at))) == 1
    assert len(list(kept.read(until=rows[1].at))) == 1
    patients = {row.patient for row in rows} - {""}
    for patient in patients:
        assert [row.patient for row in kept.read(patients=[patient])] == [patient]


def test_the_trail_is_exported_by_a_command(
    application: FastAPI, client: Any, example: Any, call: Any, tmp_path: Path
) -> None:
    client.post(WHERE, json=example())
    client.post(WHERE, json={"nonsense": 1})
    database = f"sqlite:///{tmp_path / 'service.sqlite3'}"
    done = call("audit", "export", "--database", database)
    assert done.code == 0
    lines = [json.loads(line) for line in done.out.splitlines()]
    assert lines == trail(application)
    for event in lines:
        sound(event)
    later = call("audit", "export", "--database", database, "--since", lines[1]["recorded"])
    assert [json.loads(line) for line in later.out.splitlines()] == lines[1:]
    written = tmp_path / "trail.ndjson"
    assert call("audit", "export", "--database", database, "--out", written).code == 0
    assert written.read_bytes() == done.out
    stranger = call("audit", "export", "--database", database, "--patient", "https://x.example|F-20417")
    assert (stranger.code, stranger.out) == (0, b"")
    assert call("audit", "export", "--database", database, "--patient", "F-20417").code == 2
    assert call("audit", "export", "--database", f"sqlite:///{tmp_path / 'nowhere'}").code == 3


def test_every_way_to_a_patient_leaves_an_event(
    application: FastAPI, client: Any, example: Any, hook_call: Any, call: Any, tmp_path: Path
) -> None:
    """Hook call and feedback, search, read and history of resources, refused and unknown ones."""

    def new(action: str, interaction: str, outcome: str = "0") -> dict[str, Any]:
        (event,) = trail(application)[len(seen) :]
        seen.append(event)
        sound(event)
        found = (event["action"], event["subtype"][0]["code"], event["outcome"])
        assert found == (action, interaction, outcome)
        return event

    seen: list[dict[str, Any]] = []
    bundle = client.post(WHERE, json=example()).json()["bundle"]
    assert len(patient_digests(new("C", "create"))) == 1
    client.post("/cds-services/exam-review-patient-view", json=hook_call())
    assert len(patient_digests(new("E", "operation"))) == 1
    report = {"feedback": [{"card": REQUEST, "outcome": "accepted", "acceptedSuggestions": [{"id": REQUEST}],
                            "outcomeTimestamp": "2026-03-14T10:00:00Z"}]}  # fmt: skip
    answer = client.post("/cds-services/exam-review-patient-view/feedback", json=report)
    assert answer.status_code == 200, answer.text
    new("C", "create")
    subject = next(e["resource"]["subject"] for e in bundle["entry"] if "subject" in e["resource"])
    asked = f"{subject['identifier']['system']}|{subject['identifier']['value']}"
    found = client.get("/fhir/r4/Observation", params={"patient:identifier": asked, "_count": "3"})
    assert found.status_code == 200, found.text
    event = new("E", "search-type")
    (query,) = [entity["query"] for entity in event["entity"] if "query" in entity]
    assert base64.b64decode(query) == b"patient:identifier=&_count="
    one = f"Observation/{found.json()['entry'][0]['resource']['id']}"
    client.get(f"/fhir/r4/{one}")
    assert one in json.dumps(new("R", "read"))
    client.get(f"/fhir/r4/{one}/_history/1")
    new("R", "vread")
    client.get(f"/fhir/r4/{one}/_history")
    new("R", "history-instance")
    assert client.get(f"/fhir/r4/Observation/{REQUEST}").status_code == 404
    new("R", "read", "4")
    assert "F-20417" not in json.dumps(seen)
    database = f"sqlite:///{tmp_path / 'service.sqlite3'}"
    mine = call("audit", "export", "--database", database, "--patient", asked)
    assert len(mine.out.splitlines()) == 5  # the post, the search, read, vread, history
    chart = ("--chart-id", "p-20417", "--server", "https://fernwood.example/fhir")
    assert len(call("audit", "export", "--database", database, *chart).out.splitlines()) == 1


def patient_digests(event: dict[str, Any]) -> list[str]:
    """The digests of the patients an event is about."""
    system = "https://fhirgallop.org/fhir/patient-digest"
    whats = (entity.get("what", {}).get("identifier", {}) for entity in event["entity"])
    return [what["value"] for what in whats if what.get("system") == system]


def test_a_failed_sign_in_is_kept_with_no_token(tmp_path: Path, root: Path) -> None:
    """DICOM 110114, User Authentication, as BALP and the base specification have it."""
    token = "a-guess-at-the-token-of-the-administrators"
    chosen = settings.load(
        maps=root / "examples/informatician", database=f"sqlite:///{tmp_path / 'auth.sqlite3'}",
        admin_token="0" * 64, address="http://localhost:8470",
    )  # fmt: skip
    with TestClient(create_app(chosen), base_url="http://localhost:8470") as client:
        refused = client.get("/cds-feedback", headers={"Authorization": f"Bearer {token}"})
        assert refused.status_code == 401
        (event,) = trail(client.app)  # type: ignore[arg-type]
    sound(event)
    assert (event["type"]["system"], event["type"]["code"]) == (DICOM, "110114")
    assert (event["action"], event["outcome"]) == ("E", "4")
    assert event["agent"][0]["network"]["address"] == "testclient"
    assert token[-16:] not in json.dumps(event)


def test_each_record_of_a_list_leaves_its_own_event(application: FastAPI, client: Any, example: Any) -> None:
    records = [example(), example(exam={"number": "E-2"}, heart={"s4": "thundering"})]
    told = client.post(WHERE, json=records).json()
    assert [one["status"] for one in told["results"]] == ["coded", "refused"]
    well, refused = trail(application)
    for event in (well, refused):
        sound(event)
    assert (well["action"], well["outcome"]) == ("C", "0")
    assert (refused["outcome"], refused["outcomeDesc"]) == ("4", "HTTP 422")
    assert refused["contained"][0]["issue"][0]["severity"] == "error"
    exams = [e["what"]["identifier"]["value"] for e in well["entity"] if "role" in e]
    assert any(value.startswith("urn:uuid:") for value in exams), "the examination by its identity"
    changed = client.post(WHERE, json=example(heart={"s4": "no"}))
    assert changed.status_code == 200
    assert trail(application)[-1]["action"] == "U", "an amendment updates"
