"""Many examinations in one request, coded after it was answered: progress, results, ends good and bad."""

from __future__ import annotations

import contextlib
import json
import os
import random
import time
from collections.abc import Callable, Iterator
from dataclasses import replace
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import httpx
import pytest
from fastapi import FastAPI
from sqlalchemy import func, select
from starlette.testclient import TestClient

from fhirgallop import settings
from fhirgallop.service import batch_desk, batch_work
from fhirgallop.service.answers import RefusalError
from fhirgallop.service.app import create_app
from fhirgallop.service.auth.caller import Caller
from fhirgallop.storage.batches import Batch, Batches, NewResult, SupersededError, add_result
from fhirgallop.storage.engine import connect, open_database
from fhirgallop.storage.submissions import StorageError
from fhirgallop.storage.tables import audit, batch_results, batches, submissions

WHERE = "/exams?map=fernwood-heart-form"
LATER = {"Prefer": "respond-async"}
NDJSON = {"Content-Type": "application/x-ndjson"}
# how often the service is killed, on each database, and how many examinations there are; full size: 20, 200
KILLS = int(os.environ.get("GALLOP_KILLS", "2"))
EXAMS = int(os.environ.get("GALLOP_EXAMS", "16"))


@pytest.fixture
def batching(tmp_path: Path, root: Path) -> Iterator[Callable[..., TestClient]]:
    """The service with the ordinary clock: `batching(batch_workers=0)`."""
    with contextlib.ExitStack() as stack:

        def start(**given: Any) -> TestClient:
            chosen = settings.load(
                maps=root / "examples/informatician",
                database=f"sqlite:///{tmp_path / 'batches.sqlite3'}",
                **given,
            )
            client = TestClient(
                create_app(chosen), base_url="http://localhost", raise_server_exceptions=False
            )
            return stack.enter_context(client)

        yield start


def lines(records: list[Any]) -> bytes:
    return b"".join(json.dumps(record).encode() + b"\n" for record in records)


def end(client: Any, sent: Any, seconds: float = 60) -> dict[str, Any]:
    """The manifest of a batch, once it is done."""
    deadline = time.monotonic() + seconds
    while time.monotonic() < deadline:
        answer = client.get(sent.headers["content-location"])
        if answer.status_code == 200:
            found: dict[str, Any] = answer.json()
            return found
        assert answer.status_code == 202, answer.text
        time.sleep(0.05)
    raise AssertionError(answer.headers["x-progress"])


def results(client: Any, manifest: dict[str, Any]) -> list[dict[str, Any]]:
    """Every result of every page."""
    found = []
    for page in manifest["results"]:
        answer = client.get(page["url"])
        assert (answer.status_code, answer.headers["content-type"]) == (200, "application/x-ndjson")
        part = [json.loads(line) for line in answer.text.splitlines()]
        assert len(part) == page["count"]
        found += part
    return found


def rule(answer: Any) -> str:
    assert answer.headers["content-type"] == "application/fhir+json"
    found: str = answer.json()["issue"][0]["details"]["coding"][0]["code"]
    return found


def counted(client: TestClient, table: Any) -> int:
    app = client.app
    assert isinstance(app, FastAPI)
    with app.state.exams._examinations._store._engine.connect() as connection:
        return int(connection.scalar(select(func.count()).select_from(table)) or 0)


def test_bk_5_6_7_a_batch_from_kick_off_to_results(batching: Any, example: Any) -> None:
    """Bulk Data, "Bulk Data Kick-off Request" and "Status Request"; one bad line never spoils the others."""
    client = batching()
    records = [example(exam={"number": f"N-{number}"}) for number in range(4)]
    records[1] = example(exam={"number": "N-1"}, heart={"s4": "thundering"})
    body = lines(records) + b"{not json\n"
    sent = client.post(WHERE, content=body, headers={**NDJSON, **LATER})
    assert (sent.status_code, rule(sent)) == (202, "batch-waiting")
    assert sent.headers["content-location"].startswith("http://localhost/batches/")
    assert sent.headers["preference-applied"] == "respond-async"
    manifest = end(client, sent)
    assert [manifest[name] for name in ("total", "coded", "refused", "unreadable", "not-stored")] == [
        5, 3, 1, 1, 0,
    ]  # fmt: skip
    assert manifest["requiresAccessToken"] is False
    assert datetime.fromisoformat(manifest["transactionTime"]).tzinfo == UTC
    found = results(client, manifest)
    at_once = client.post(WHERE, content=body, headers=NDJSON).json()["results"]
    assert [one["status"] for one in found] == ["coded", "refused", "coded", "coded", "unreadable"]
    assert found == at_once, "the same as an answer at once would have been"
    assert found[0]["bundle"]["resourceType"] == "Bundle"
    assert found[1]["unknown"] == [{"field": "heart.s4", "value": "thundering"}]


def test_bk_6_progress_while_it_waits(batching: Any, example: Any) -> None:
    client = batching(batch_workers=0)
    sent = client.post(WHERE, json=[example(), example()], headers=LATER)
    asked = client.get(sent.headers["content-location"])
    assert (asked.status_code, rule(asked)) == (202, "batch-coding")
    assert asked.headers["x-progress"] == "0 of 2 gone through"
    assert int(asked.headers["retry-after"]) > 0
    assert client.get(sent.headers["content-location"] + "/results").text == ""


def test_every_form_goes_later_too(batching: Any, example: Any, root: Path) -> None:
    client = batching()
    message = (root / "examples/ehr/fernwood-exam.hl7").read_bytes()
    for body, kind in (
        (json.dumps(example()).encode(), "application/json"),
        (json.dumps([example()]).encode(), "application/json"),
        (message, "application/hl7-v2"),
        ((root / "examples/ehr/fernwood-exam.csv").read_bytes(), "text/csv"),
    ):
        sent = client.post(WHERE, content=body, headers={"Content-Type": kind, **LATER})
        assert sent.status_code == 202, sent.text
        assert end(client, sent)["coded"] == 1


def test_other_preferences_may_stand_beside(batching: Any, example: Any) -> None:
    client = batching(batch_workers=0)
    for prefer, status in (("respond-async, wait=10", 202), ("wait=10", 200), ("handling=strict", 200)):
        assert client.post(WHERE, json=example(), headers={"Prefer": prefer}).status_code == status


def test_a_review_comes_with_each_result_when_asked_for(batching: Any, example: Any) -> None:
    client = batching()
    manifest = end(client, client.post(f"{WHERE}&review=short", json=[example()], headers=LATER))
    assert results(client, manifest)[0]["review"]["safety"]


def test_results_come_in_pages(batching: Any, example: Any, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(batch_desk, "PAGE", 3)
    client = batching()
    records = [example(exam={"number": f"N-{number}"}) for number in range(7)]
    manifest = end(client, client.post(WHERE, content=lines(records), headers={**NDJSON, **LATER}))
    assert [page["count"] for page in manifest["results"]] == [3, 3, 1]
    assert [one["line"] for one in results(client, manifest)] == [1, 2, 3, 4, 5, 6, 7]


def test_a_batch_may_be_larger_than_a_request_that_waits(batching: Any, example: Any) -> None:
    client = batching(max_records=2, max_body=4_000, batch_records=5, batch_body=20_000)
    one = lines([example()])
    assert client.post(WHERE, content=one * 3, headers=NDJSON).status_code == 413
    sent = client.post(WHERE, content=one * 5, headers={**NDJSON, **LATER})
    assert end(client, sent)["total"] == 5
    for body, kind, why in (
        (one * 6, "application/x-ndjson", "http-too-many-records"),
        (one * 40, "application/x-ndjson", "http-body-too-large"),
        (b"[" + b",".join([one] * 5) + b"]", "application/json", "json-too-large"),
    ):
        refused = client.post(WHERE, content=body, headers={"Content-Type": kind, **LATER})
        assert (refused.status_code, rule(refused)) == (413, why)
    assert counted(client, batches) == 1


def test_what_holds_no_examination_is_no_batch(batching: Any) -> None:
    client = batching()
    refused = client.post(WHERE, content=b"{oops\n", headers={**NDJSON, **LATER})
    assert refused.status_code == 400
    refused = client.post(WHERE, content=b"", headers={**NDJSON, **LATER})
    assert (refused.status_code, rule(refused)) == (400, "record-none")
    assert counted(client, batches) == 0


def test_a_batch_given_up_is_gone_and_what_was_coded_stays(batching: Any, example: Any) -> None:
    client = batching()
    sent = client.post(WHERE, json=[example()], headers=LATER)
    address = sent.headers["content-location"]
    end(client, sent)
    gone = client.delete(address)
    assert (gone.status_code, rule(gone)) == (202, "batch-cancelled")
    assert "1 of 1" in gone.json()["issue"][0]["details"]["text"]
    for method, path in (("GET", address), ("GET", f"{address}/results"), ("DELETE", address)):
        answer = client.request(method, path)
        assert (answer.status_code, rule(answer)) == (404, "http-unknown-batch")
    assert (counted(client, submissions), counted(client, batch_results)) == (1, 0)


def test_a_batch_is_its_owners_alone(batching: Any, example: Any) -> None:
    client = batching(batch_workers=0)
    id_ = client.post(WHERE, json=example(), headers=LATER).headers["content-location"].rpartition("/")[2]
    stranger = Caller("system", "another-clinic")
    desk = client.app.state.batches
    for ask in (
        lambda: desk.status(id_, stranger, ""),
        lambda: desk.results(id_, stranger, 0),
        lambda: desk.cancel(id_, stranger),
    ):
        with pytest.raises(RefusalError) as refused:
            ask()
        assert refused.value.status == 404
    assert client.get(f"/batches/{id_}").status_code == 202


def test_a_batch_sent_again_under_its_key_is_the_same_batch(batching: Any, example: Any) -> None:
    client = batching()
    headers = {**LATER, "Idempotency-Key": '"back-fill of 2026-12-01"'}
    first = client.post(WHERE, json=[example()], headers=headers)
    again = client.post(WHERE, json=[example()], headers=headers)
    assert again.headers["content-location"] == first.headers["content-location"]
    assert again.headers["fhirgallop-repeated"] == "true"
    assert counted(client, batches) == 1
    assert client.post(WHERE, json=[example(), example()], headers=headers).status_code == 422


def test_the_body_is_not_kept_longer_than_needed(batching: Any, example: Any) -> None:
    client = batching()
    end(client, client.post(WHERE, json=[example()], headers=LATER))
    with client.app.state.exams._examinations._store._engine.connect() as connection:
        kept = connection.execute(select(batches.c.request, batches.c.state)).one()
    assert tuple(kept) == (b"", "done")


def test_every_record_of_a_batch_is_in_the_audit_trail(batching: Any, example: Any) -> None:
    client = batching()
    records = [example(patient={"number": f"P-{number}"}) for number in range(3)]
    manifest = end(client, client.post(WHERE, content=lines(records), headers={**NDJSON, **LATER}))
    results(client, manifest)
    with client.app.state.exams._examinations._store._engine.connect() as connection:
        rows = connection.execute(select(audit.c.patient, audit.c.event)).all()
    acts = [(row.patient, json.loads(row.event)["action"]) for row in rows if row.patient]
    assert sorted(action for _, action in acts) == ["C"] * 3 + ["R"] * 3, "coded, and results read"
    assert len({patient for patient, _ in acts}) == 3


def test_a_record_that_breaks_us_does_not_stop_the_others(
    batching: Any, example: Any, caplog: pytest.LogCaptureFixture
) -> None:
    client = batching(batch_workers=0)
    records = [example(exam={"number": f"N-{number}"}) for number in range(3)]
    sent = client.post(WHERE, content=lines(records), headers={**NDJSON, **LATER})
    state = client.app.state
    code, calls = state.exams._examinations.code, iter(range(3))

    def breaking(*given: Any) -> Any:
        if next(calls) == 1:
            raise ZeroDivisionError("F-20417")
        return code(*given)

    state.exams._examinations.code = breaking
    _work(state, settings.load(batch_workers=1))
    found = results(client, end(client, sent))
    assert [one["status"] for one in found] == ["coded", "not-stored", "coded"]
    assert "record-broke" in json.dumps(found[1])
    assert "F-20417" not in caplog.text


def test_a_database_that_fails_is_waited_for(
    batching: Any, example: Any, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(batch_work, "_PAUSE_SECONDS", 0.01)
    client = batching(batch_workers=0)
    records = [example(exam={"number": f"N-{number}"}) for number in range(3)]
    sent = client.post(WHERE, content=lines(records), headers={**NDJSON, **LATER})
    state = client.app.state
    code, calls = state.exams._examinations.code, iter(range(9))

    def failing(*given: Any) -> Any:
        if next(calls) in (1, 2):
            raise StorageError("OperationalError")
        return code(*given)

    state.exams._examinations.code = failing
    _work(state, settings.load(batch_workers=1))
    assert [one["status"] for one in results(client, end(client, sent))] == ["coded"] * 3


def test_a_map_that_is_gone_is_said_of_each_record(batching: Any, example: Any) -> None:
    client = batching(batch_workers=0)
    sent = client.post(WHERE, json=[example(), example()], headers=LATER)
    client.app.state.batch_work._shelf = {}
    _work(client.app.state, settings.load(batch_workers=1))
    found = results(client, end(client, sent))
    assert [one["status"] for one in found] == ["refused"] * 2
    assert "batch-map-gone" in json.dumps(found)


def test_a_map_that_was_changed_is_said_of_each_record(batching: Any, example: Any) -> None:
    client = batching(batch_workers=0)
    sent = client.post(WHERE, json=[example()], headers=LATER)
    changed = replace(client.app.state.shelf["fernwood-heart-form"], version="2027.1")
    client.app.state.batch_work._shelf = {"fernwood-heart-form": changed}
    _work(client.app.state, settings.load(batch_workers=1))
    (found,) = results(client, end(client, sent))
    assert found["status"] == "coded"
    assert "batch-map-changed" in json.dumps(found["outcome"])


def test_a_body_that_breaks_its_reader_comes_to_an_end(
    batching: Any, example: Any, monkeypatch: pytest.MonkeyPatch
) -> None:
    client = batching(batch_workers=0)
    sent = client.post(WHERE, json=[example(), example()], headers=LATER)
    after = client.post(WHERE, json=[example()], headers=LATER)
    whole = batch_work.records

    def breaking(body: bytes, kind: str, chosen: settings.Settings) -> Iterator[Any]:
        for place, read in enumerate(whole(body, kind, chosen)):
            if place == 1:
                raise ZeroDivisionError
            yield read

    monkeypatch.setattr(batch_work, "records", breaking)
    _work(client.app.state, settings.load(batch_workers=1))
    found = results(client, end(client, sent))
    assert [one["status"] for one in found] == ["coded", "not-stored"]
    assert "batch-broke" in json.dumps(found[1])
    assert end(client, after)["coded"] == 1, "the next one has its turn"


def _work(state: Any, chosen: settings.Settings) -> None:
    """Starts threads in a service that was started without."""
    state.batch_work._settings = chosen
    state.batch_work.start()


@pytest.fixture
def kept(tmp_path: Path) -> Iterator[Batches]:
    engine = open_database(f"sqlite:///{tmp_path / 'store.sqlite3'}")
    yield Batches(engine)
    engine.dispose()


def test_only_who_holds_a_batch_may_go_on_with_it(kept: Batches) -> None:
    """A worker that was thought dead, and wakes up, changes nothing any more."""
    engine = kept._engine
    kept.add(Batch("b", "owner", "waiting", 1, b"{}", 3), b"body")
    assert kept.claim("one", now=10, until=20)
    assert kept.claim("two", now=15, until=25) is None, "it is held"

    def step(worker: str, position: int) -> None:
        with engine.begin() as connection:
            result = NewResult(position, "refused", "", None, b"{}")
            add_result(connection, "b", worker, result, lease=30)

    step("one", 0)
    with pytest.raises(SupersededError):
        step("one", 0)
    assert kept.claim("two", now=29, until=40) is None, "each step holds it on"
    taken = kept.claim("two", now=31, until=60)
    assert taken
    assert (taken.done, taken.worker) == (1, "two")
    with pytest.raises(SupersededError):
        step("one", 1)
    step("two", 1)
    kept.cancel("b", "owner")
    with pytest.raises(SupersededError):
        step("two", 2)
    assert kept.claim("two", now=99, until=100) is None


def test_the_oldest_batch_is_first_and_one_given_back_is_free_at_once(kept: Batches) -> None:
    for number in (2, 1):
        kept.add(Batch(f"b{number}", "owner", "waiting", number, b"{}", 1), b"")
    first = kept.claim("one", now=10, until=20)
    assert first
    assert first.id == "b1"
    kept.release("b1", "one")
    again = kept.claim("two", now=10, until=20)
    assert again
    assert again.id == "b1"


@pytest.mark.parametrize("kind", ["sqlite", "postgres"])
def test_sudden_death_loses_and_doubles_nothing(
    kind: str, request: pytest.FixtureRequest, serving: Callable[..., Any], example: Any
) -> None:
    """SIGKILL in the middle of a batch: whoever starts next goes on with it; two processes share the work."""
    address = {} if kind == "sqlite" else {"DATABASE": request.getfixturevalue("postgres")}
    service = serving(**address)
    rng = random.Random(20261201)
    records = [example(exam={"number": f"N-{number}"}) for number in range(EXAMS)]
    with httpx.Client(base_url=service.base, trust_env=False, timeout=60) as client:
        sent = client.post(WHERE, content=lines(records), headers={**NDJSON, **LATER})
        assert sent.status_code == 202
        for _ in range(KILLS):
            _some_done(client, sent)
            time.sleep(rng.uniform(0, 0.05))
            service.kill()
            _lease_over(service.database)
            service.start()
        if kind == "postgres":
            serving(DATABASE=service.database)
        manifest = end(client, sent)
        found = results(client, manifest)
    assert manifest["coded"] == len(found) == EXAMS
    assert [one["line"] for one in found] == list(range(1, EXAMS + 1))
    engine = connect(service.database)
    with engine.connect() as connection:
        assert list(connection.scalars(select(submissions.c.version))) == [1] * EXAMS
    engine.dispose()
    assert "Traceback" not in service.log()


def _some_done(client: httpx.Client, sent: Any) -> None:
    """Waits until one more record was gone through, or all."""
    before = ""
    for _ in range(2000):
        answer = client.get(sent.headers["content-location"])
        progress = answer.headers.get("x-progress", "")
        if answer.status_code == 200 or (before and progress != before):
            return
        before = progress
        time.sleep(0.01)
    raise AssertionError(progress)


def _lease_over(database: str) -> None:
    """Nobody waits a minute in a test: the lease of the dead is over now."""
    engine = connect(database)
    with engine.begin() as connection:
        connection.execute(batches.update().values(lease=0))
    engine.dispose()
