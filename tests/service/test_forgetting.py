"""The deletion of one patient's data while the service runs, and the hourly pruning."""

from __future__ import annotations

import asyncio
import json
from collections.abc import Callable
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import pytest
from sqlalchemy import select
from starlette.testclient import TestClient

from fhirgallop.cards.card import digest
from fhirgallop.service.housekeeping import house_kept
from fhirgallop.storage.engine import connect, open_database
from fhirgallop.storage.keys import patient_key
from fhirgallop.storage.retention import Keeping
from fhirgallop.storage.submissions import Submission, Submissions
from fhirgallop.storage.tables import audit, metadata, submissions

SYSTEM, VALUE = "https://fernwood.example/patients", "F-20417"
SERVER = "https://fernwood.example/fhir"
WRITTEN = "Evergreen-4711"


def say(speaking: TestClient, example: Callable[..., Any], hook_call: Callable[..., Any]) -> None:
    """An examination, cards of its patient, and an answer to a card."""
    url = "/exams?map=fernwood-heart-form"
    record = example()
    assert speaking.post(url, json=record, headers={"Idempotency-Key": "one-of-ours"}).status_code == 200
    other = {**record, "patient": {"number": "F-99999"}}
    assert speaking.post(url, json=other).status_code == 200
    cards = speaking.post("/cds-services/exam-review-patient-view", json=hook_call()).json()["cards"]
    reason = {"outcome": "overridden", "overrideReason": {"userComment": WRITTEN},
              "outcomeTimestamp": "2026-03-14T10:00:00Z"}  # fmt: skip
    body = {"feedback": [{"card": cards[0]["uuid"], **reason}]}
    assert speaking.post("/cds-services/exam-review-patient-view/feedback", json=body).status_code == 200


def test_a_patient_is_forgotten_everywhere_but_in_the_trail(
    hooked_with: Callable[..., TestClient],
    example: Callable[..., dict[str, Any]],
    hook_call: Callable[..., dict[str, Any]],
    call: Callable[..., Any],
    tmp_path: Path,
) -> None:
    speaking = hooked_with()
    say(speaking, example, hook_call)
    address = f"sqlite:///{tmp_path / 'hooks.sqlite3'}"

    def traces(*words: str) -> set[str]:
        files = [file.read_bytes() for file in tmp_path.glob("hooks.sqlite3*")]
        return {word for word in words if any(word.encode() in file for file in files)}

    assert traces(VALUE, WRITTEN, "F-99999") == {VALUE, WRITTEN, "F-99999"}
    done = call(
        "database", "forget", "--patient", f"{SYSTEM}|{VALUE}", "--chart-id", "p-20417",
        "--server", SERVER + "/", "--yes", "--database", address,
    )  # fmt: skip
    assert done.code == 0, done.err
    counts = {line.split()[1]: int(line.split()[0]) for line in done.out.decode().splitlines()[:-1]}
    assert counts["submissions"] == counts["hook_memories"] == counts["hook_feedback"] == 1
    assert counts["resources"] > 10
    assert traces(VALUE, WRITTEN, "F-99999") == {"F-99999"}
    whose, chart = patient_key(SYSTEM, VALUE), digest("patient", SERVER, "p-20417")
    engine = connect(address)
    with engine.connect() as connection:
        for table in metadata.sorted_tables:
            if "patient" in table.columns and table is not audit:
                assert not {whose, chart} & set(connection.scalars(select(table.c.patient)))
        events = [json.loads(event) for event in connection.scalars(select(audit.c.event))]
    engine.dispose()
    (deleted,) = [event for event in events if event["action"] == "D" and whose in json.dumps(event)]
    assert deleted["subtype"][0]["code"] == "delete"
    # the service knows nothing more, and begins anew
    say(speaking, example, hook_call)


def test_who_is_to_be_forgotten_must_be_said_and_confirmed(
    call: Callable[..., Any], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    address = f"sqlite:///{tmp_path / 'some.sqlite3'}"
    engine = open_database(address)
    one = Submission(
        "urn:a", "R4", True, 1, "m", "1", "h", patient_key("s", "v"), "2026-12-01T08:30:00Z", b"{}"
    )
    assert Submissions(engine).add(one)
    for words, said in (
        ((), "say whose"),
        (("--patient", "v"), "system and value"),
        (("--patient", "s|"), "system and value"),
        (("--chart-id", "v"), "go together"),
    ):
        done = call("database", "forget", *words, "--database", address)
        assert done.code == 2
        assert said in done.err
    monkeypatch.setattr("typer.confirm", lambda _text: False)
    assert call("database", "forget", "--patient", "s|v", "--database", address).code == 1
    with engine.connect() as connection:
        assert connection.scalar(select(submissions.c.exam)) == "urn:a"
    engine.dispose()


def test_resources_that_name_a_patient_by_address_are_found_too(
    hooked_with: Callable[..., TestClient], call: Callable[..., Any], tmp_path: Path
) -> None:
    speaking = hooked_with()
    base = {"resourceType": "Observation", "status": "final", "effectiveDateTime": "2026-03-14",
            "code": {"text": "fourth heart sound"}}  # fmt: skip
    for reference in (f"{SERVER}/Patient/p-20417", "Patient/p-20417", "Patient/p-2"):
        sent = {**base, "subject": {"reference": reference}}
        headers = {"Content-Type": "application/fhir+json"}
        answer = speaking.post("/fhir/r4/Observation", content=json.dumps(sent), headers=headers)
        assert answer.status_code == 201, answer.text
    address = f"sqlite:///{tmp_path / 'hooks.sqlite3'}"
    words = ("database", "forget", "--yes", "--database", address)
    for more, left in ((("--chart-id", "p-20417", "--server", SERVER), 2), (("--patient", "|p-20417"), 1)):
        assert call(*words, *more).code == 0
        assert len(speaking.get("/fhir/r4/Observation").json()["entry"]) == left


def test_the_service_prunes_by_itself(tmp_path: Path) -> None:
    engine = open_database(f"sqlite:///{tmp_path / 'some.sqlite3'}")
    store = Submissions(engine)
    for exam, received in (("urn:old", "2026-10-01T08:00:00Z"), ("urn:new", "2026-11-30T08:00:00Z")):
        assert store.add(Submission(exam, "R4", True, 1, "m", "1", "h", "p", received, b"{}"))

    async def an_hour() -> None:
        clock = lambda: datetime(2026, 12, 1, tzinfo=UTC)  # noqa: E731
        async with house_kept(engine, Keeping(exams=30), clock, first=0, every=0.01):
            async with asyncio.timeout(30):
                while store.latest("urn:old", "R4", snomed=True):
                    await asyncio.sleep(0.01)

    asyncio.run(an_hour())
    assert store.latest("urn:new", "R4", snomed=True)
    engine.dispose()


def test_a_pruning_that_fails_is_logged_and_tried_again(
    tmp_path: Path, caplog: pytest.LogCaptureFixture
) -> None:
    engine = open_database(f"sqlite:///{tmp_path / 'some.sqlite3'}")
    with engine.begin() as connection:
        connection.exec_driver_sql("ALTER TABLE used_tokens RENAME TO elsewhere")

    def told() -> int:
        return sum("could not be deleted: OperationalError" in line for line in caplog.messages)

    async def an_hour() -> None:
        async with house_kept(engine, Keeping(), lambda: datetime.now(UTC), first=0, every=0.01):
            async with asyncio.timeout(30):
                while told() < 2:
                    await asyncio.sleep(0.01)

    asyncio.run(an_hour())
    engine.dispose()
