"""Sent again, amended, corrected, taken back: over REST in, read over FHIR out, version by version."""

from __future__ import annotations

import json
from typing import Any

import pytest
from fastapi import FastAPI
from sqlalchemy import func, select
from starlette.testclient import TestClient

from fhirgallop import settings
from fhirgallop.service.app import create_app
from fhirgallop.storage.tables import audit, outbox, resources, submissions

WHERE = "/exams?map=fernwood-heart-form"
WHOSE = "https://fernwood.example/patients|F-20417"
Json = dict[str, Any]


def named(bundle: Json, title: str) -> str:
    """Address of the coded Observation with this title."""
    (found,) = [
        entry["fullUrl"].removeprefix("urn:uuid:")
        for entry in bundle["entry"]
        if entry["resource"].get("code", {}).get("text") == title
    ]
    return f"/fhir/r4/Observation/{found}"


def read(client: Any, address: str) -> tuple[str, str]:
    """Version and status of a resource."""
    answer = client.get(address)
    assert answer.status_code == 200, answer.text
    return answer.json()["meta"]["versionId"], answer.json()["status"]


def history(client: Any, address: str) -> list[tuple[str, str]]:
    """Version and status of each version, newest first."""
    entries = client.get(f"{address}/_history").json()["entry"]
    return [(entry["resource"]["meta"]["versionId"], entry["resource"]["status"]) for entry in entries]


def rules(answer: Any) -> list[str]:
    told = answer.json()
    issues = told.get("outcome", told)["issue"]
    return [issue["details"]["coding"][0]["code"] for issue in issues if "coding" in issue["details"]]


def rows(application: FastAPI, table: Any) -> int:
    engine = application.state.exams._examinations._store._engine
    with engine.connect() as connection:
        return int(connection.scalar(select(func.count()).select_from(table)) or 0)


def test_what_was_answered_can_be_read_by_its_identity(client: Any, example: Any) -> None:
    bundle = client.post(WHERE, json=example()).json()["bundle"]
    for entry in bundle["entry"]:
        kind, id_ = entry["resource"]["resourceType"], entry["fullUrl"].removeprefix("urn:uuid:")
        found = client.get(f"/fhir/r4/{kind}/{id_}")
        assert found.status_code == 200
        assert found.json()["meta"]["versionId"] == "1"
        assert "urn:uuid" not in json.dumps([found.json().get("hasMember"), found.json().get("result")])
    searched = client.get("/fhir/r4/Observation", params={"patient:identifier": WHOSE, "_total": "accurate"})
    assert searched.json()["total"] == sum(
        entry["resource"]["resourceType"] == "Observation" for entry in bundle["entry"]
    )


def test_sent_twice_is_one_version(application: FastAPI, client: Any, example: Any) -> None:
    bundle = client.post(WHERE, json=example()).json()["bundle"]
    before = rows(application, resources)
    client.post(WHERE, json=example())
    assert rows(application, resources) == before
    assert history(client, named(bundle, "Heart rate")) == [("1", "final")]


def test_a_change_is_the_second_version_of_what_changed_alone(client: Any, example: Any) -> None:
    bundle = client.post(WHERE, json=example()).json()["bundle"]
    client.post(WHERE, json=example(vitals={"hr": 84}))
    rate, sound = named(bundle, "Heart rate"), named(bundle, "Fourth heart sound")
    assert history(client, rate) == [("2", "amended"), ("1", "final")]
    assert history(client, sound) == [("1", "final")]
    values = [client.get(f"{rate}/_history/{version}").json()["valueQuantity"]["value"] for version in (1, 2)]
    assert values == [78, 84]


def test_a_correction_is_called_so(client: Any, root: Any) -> None:
    """OBR-25 C: HL7 v2 table 0123, "correction to results"."""
    headers = {"Content-Type": "application/hl7-v2"}
    message = (root / "examples/ehr/fernwood-exam.hl7").read_text("utf-8")
    bundle = client.post(WHERE, content=message, headers=headers).json()["bundle"]
    lines = [line.split("|") for line in message.splitlines()]
    for line in lines:
        if line[0] == "OBR":
            line[25] = "C"
        if line[0] == "OBX" and line[3].startswith("vitals.hr"):
            line[5], line[11] = "84", "C"
    changed = "\r".join("|".join(line) for line in lines)
    assert client.post(WHERE, content=changed, headers=headers).status_code == 200
    assert read(client, named(bundle, "Heart rate")) == ("2", "corrected")


def test_what_is_taken_back_is_entered_in_error_and_comes_back_as_amended(client: Any, example: Any) -> None:
    bundle = client.post(WHERE, json=example()).json()["bundle"]
    third = named(bundle, "Third heart sound")
    client.post(WHERE, json=example(heart={"s4": "no", "s3": None, "done": None}))
    assert read(client, third) == ("2", "entered-in-error")
    client.post(WHERE, json=example())
    assert [version for version, _ in history(client, third)] == ["3", "2", "1"]
    assert read(client, third)[1] in ("amended", "corrected")


def test_a_draft_is_signed_and_a_late_draft_changes_nothing(client: Any, example: Any) -> None:
    bundle = client.post(WHERE, json=example(exam={"state": "draft"})).json()["bundle"]
    rate = named(bundle, "Heart rate")
    assert read(client, rate) == ("1", "preliminary")
    client.post(WHERE, json=example())
    assert read(client, rate) == ("2", "final")
    late = client.post(WHERE, json=example(exam={"state": "draft"}, vitals={"hr": 99}))
    assert (late.status_code, rules(late)) == (422, ["exam-draft-after-signed"])
    assert history(client, rate) == [("2", "final"), ("1", "preliminary")]


@pytest.fixture
def taking_back(client: Any, example: Any, root: Any) -> Any:
    """Sends the example as a QuestionnaireResponse that was entered in error."""
    text = (root / "examples/ehr/fernwood-exam.questionnaireresponse.json").read_text("utf-8")

    def send(number: str = "F-20417") -> Any:
        form = json.loads(text.replace("F-20417", number))
        form["status"] = "entered-in-error"
        return client.post(WHERE, json=form, headers={"Content-Type": "application/fhir+json"})

    return send


def test_a_whole_examination_taken_back(client: Any, example: Any, taking_back: Any) -> None:
    """FHIR R4 QuestionnaireResponse.status entered-in-error: every resource of it is, and stays readable."""
    bundle = client.post(WHERE, json=example()).json()["bundle"]
    answer = taking_back()
    assert answer.status_code == 200, answer.text
    kept = [entry for entry in bundle["entry"] if "status" in entry["resource"]]
    for entry in kept:
        kind, id_ = entry["resource"]["resourceType"], entry["fullUrl"].removeprefix("urn:uuid:")
        assert read(client, f"/fhir/r4/{kind}/{id_}") == ("2", "entered-in-error")
    review = answer.json()["review"]
    assert review["cards"] == []


def test_the_same_number_under_another_patient_is_pointed_out_until_it_is_settled(
    client: Any, example: Any, taking_back: Any
) -> None:
    first = client.post(WHERE, json=example(patient={"number": "F-99999"}))
    assert rules(first) == []
    second = client.post(WHERE, json=example())
    assert (second.status_code, rules(second)) == (200, ["exam-number-other-patient"])
    assert "F-99999" not in second.text.replace(json.dumps(second.json()["bundle"]), "")
    assert rules(client.post(WHERE, json=example())) == ["exam-number-other-patient"], "also when repeated"
    taken = taking_back("F-99999")
    assert (taken.status_code, rules(taken)) == (200, []), "the cure is not complained of"
    assert rules(client.post(WHERE, json=example())) == []
    assert rules(client.post(WHERE, json=example(exam={"number": "E-other"}))) == []


def test_a_number_of_very_many_patients_is_pointed_out_without_looking_at_all(
    application: FastAPI, client: Any, example: Any, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A clinic that counts each patient's visits from 1: what an examination costs must not grow with it."""
    store = application.state.exams._examinations._store
    looked: list[int] = []
    bundle = store.bundle
    monkeypatch.setattr(store, "bundle", lambda row: looked.append(row) or bundle(row))
    for number in range(22):
        told = client.post(WHERE + "&review=none", json=example(patient={"number": f"P-{number}"}))
        assert rules(told) == (["exam-number-other-patient"] if number else [])
    assert len(store.seen("urn:uuid:none", _number(store), "nobody")) == 20
    looked.clear()
    client.post(WHERE, json=example(patient={"number": "P-99"}))
    assert looked == []


def _number(store: Any) -> str:
    with store._engine.connect() as connection:
        found: str = connection.scalars(select(submissions.c.number)).first()
    return found


def test_all_or_nothing(application: FastAPI, client: Any, example: Any, monkeypatch: Any) -> None:
    """What breaks while the resources are written leaves no examination, and no answer under the key."""
    key = {"Idempotency-Key": "a-key-of-mine"}
    written = "fhirgallop.service.examinations.resources.add_versions"

    def breaking(*_: Any, **__: Any) -> None:
        raise ZeroDivisionError

    with monkeypatch.context() as patch:
        patch.setattr(written, breaking)
        assert client.post(WHERE, json=example(), headers=key).status_code == 500
    assert rows(application, submissions) == rows(application, resources) == 0
    done = client.post(WHERE, json=example(), headers=key)
    assert (done.status_code, "fhirgallop-repeated" in done.headers) == (200, False)
    assert rows(application, submissions) == 1


def test_only_what_the_record_system_gets_is_noted_for_delivery(
    root: Any, tmp_path: Any, example: Any
) -> None:
    chosen = settings.load(
        maps=root / "examples/informatician",
        database=f"sqlite:///{tmp_path / 'd.sqlite3'}",
        deliver_to="https://fernwood.example/fhir",
        delivery_workers=0,
    )
    application = create_app(chosen)
    with TestClient(application, base_url="http://localhost") as client:
        for more in ("", "&edition=R5", "&snomed=false", ""):
            assert client.post(WHERE + more, json=example()).status_code == 200
        assert (rows(application, outbox), rows(application, submissions)) == (1, 3)
        assert client.post(WHERE, json=example(vitals={"hr": 84})).status_code == 200
        assert rows(application, outbox) == 2


def test_the_audit_trail_says_what_was_done(application: FastAPI, client: Any, example: Any) -> None:
    client.post(WHERE, json=example())
    client.post(WHERE, json=example())
    client.post(WHERE, json=example(vitals={"hr": 84}))
    client.post(WHERE, json=example(heart={"s4": "thundering"}))
    client.post(WHERE, json=[example(), example(heart={"s4": "thundering"})])
    engine = application.state.exams._examinations._store._engine
    with engine.connect() as connection:
        events = [
            json.loads(event) for event in connection.scalars(select(audit.c.event).order_by(audit.c.id))
        ]
    told = [(event["action"], event["outcome"]) for event in events]
    assert told == [("C", "0"), ("R", "0"), ("U", "0"), ("C", "4"), ("U", "0"), ("C", "4")]
    assert all("urn:uuid:" in json.dumps(event["entity"]) for event in (events[0], events[2]))


def test_a_change_over_fhir_that_a_later_record_replaces_is_told(client: Any, example: Any) -> None:
    record = example()
    address = named(client.post(WHERE, json=record).json()["bundle"], "Heart rate")
    pulse = client.get(address).json()
    pulse["status"], pulse["valueQuantity"]["value"] = "corrected", 99
    fhir = {"Content-Type": "application/fhir+json"}
    assert client.put(address, json=pulse, headers=fhir).status_code == 200
    assert "exam-replaces-other-change" not in rules(client.post(WHERE, json=record))  # nothing was replaced
    assert client.get(address).json()["valueQuantity"]["value"] == 99
    record["vitals"]["temp"] = "37,1"
    assert "exam-replaces-other-change" in rules(client.post(WHERE, json=record))
    assert [version for version, _ in history(client, address)] == ["3", "2", "1"]
    record["vitals"]["temp"] = "37,2"
    assert "exam-replaces-other-change" not in rules(client.post(WHERE, json=record))
