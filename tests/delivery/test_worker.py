"""One try from claim to result, with a record system that answers what a test says."""

from __future__ import annotations

import json
import logging
import threading
import time
from collections.abc import Callable
from datetime import UTC, datetime, timedelta
from typing import Any

import pytest
from sqlalchemy import Engine, event

from fhirgallop.delivery.client import Answer, ClientError
from fhirgallop.delivery.patience import Patience
from fhirgallop.delivery.post import Post
from fhirgallop.delivery.worker import Way, Workers, deliver_one
from fhirgallop.storage.outbox import Delivery, Outbox
from fhirgallop.storage.submissions import StorageError

Put = Callable[..., None]
ENTRY = b'{"response":{"status":"200"}}'
DONE = Answer(
    200, {}, b'{"resourceType":"Bundle","type":"transaction-response","entry":[%s]}' % ENTRY
)  # fmt: skip


class Clock:
    def __init__(self) -> None:
        self.at = datetime(2026, 12, 1, 8, 0, tzinfo=UTC)

    def __call__(self) -> datetime:
        return self.at

    def pass_by(self, seconds: float) -> None:
        self.at += timedelta(seconds=seconds)


class Wire:
    """Stands for the client: gives the answers in order, the last one again and again."""

    def __init__(self, *answers: Answer | ClientError | Callable[[], Answer]) -> None:
        self.answers = list(answers)
        self.sent: list[dict[str, Any]] = []

    def send(self, method: str, url: str, **sent: Any) -> Answer:
        self.sent.append({"method": method, "url": url, **sent})
        found = self.answers.pop(0) if len(self.answers) > 1 else self.answers[0]
        if isinstance(found, ClientError):
            raise found
        return found() if callable(found) else found


@pytest.fixture
def clock() -> Clock:
    return Clock()


@pytest.fixture
def way(sqlite_engine: Engine, clock: Clock) -> Callable[..., Way]:
    """A worker's means: `way(wire, tries=2)`."""

    def make(wire: Wire, *, tries: int = 20, after: int = 3) -> Way:
        ids = iter(range(10**6))
        post = Post(wire, "https://record.example/fhir", None, lambda: f"id-{next(ids)}")  # type: ignore[arg-type]
        patience = Patience(first=1000, most=60_000, tries=tries, after=after, rest=5000)
        return Way(Outbox(sqlite_engine), post, patience, 30_000, clock, lambda: 1.0)

    return make


def first(one: Way) -> Delivery:
    found = one.outbox.one(1)
    assert found
    return found


def test_the_kept_bytes_go_out_as_a_transaction_under_an_id_of_the_request(
    way: Callable[..., Way], sqlite_engine: Engine, put: Put
) -> None:
    wire = Wire(DONE)
    put(sqlite_engine, "a", bundle=b'{"entry": [{"x": 1.20}]}')
    assert deliver_one(way(wire), "w") == "delivered"
    assert wire.sent == [
        {
            "method": "POST",
            "url": "https://record.example/fhir",
            "headers": {
                "Content-Type": "application/fhir+json",
                "Accept": "application/fhir+json",
                "Prefer": "return=minimal",
                "X-Request-Id": "id-0",
            },
            "body": b'{"entry": [{"x": 1.20}]}',
        }
    ]
    found = first(way(wire))
    assert found.state == "delivered"
    assert json.loads(found.outcome or b"")["entry"] == [{"status": "200"}]
    assert deliver_one(way(wire), "w") == ""


def test_a_failure_waits_longer_each_time_and_keeps_its_reason(
    way: Callable[..., Way], sqlite_engine: Engine, put: Put, clock: Clock
) -> None:
    one = way(Wire(Answer(412, {}, b"")))
    put(sqlite_engine, "a")
    for wait in (1, 2, 4):
        assert deliver_one(one, "w") == "412"
        found = first(one)
        assert (found.state, found.reason) == ("waiting", "answered 412")
        assert found.due == one.now() + wait * 1000
        clock.pass_by(wait - 0.001)
        assert deliver_one(one, "w") == ""
        clock.pass_by(0.001)


def test_retry_after_is_honoured_by_everybody(
    way: Callable[..., Way], sqlite_engine: Engine, put: Put, clock: Clock
) -> None:
    one = way(Wire(Answer(429, {"retry-after": "40"}, b""), DONE))
    put(sqlite_engine, "a")
    put(sqlite_engine, "b", patient="q")
    assert deliver_one(one, "w") == "429"
    clock.pass_by(39.9)
    assert deliver_one(one, "other") == ""
    clock.pass_by(0.1)
    assert [deliver_one(one, "w"), deliver_one(one, "other")] == ["delivered"] * 2


def test_what_would_be_refused_again_fails_at_once(
    way: Callable[..., Way], sqlite_engine: Engine, put: Put, caplog: pytest.LogCaptureFixture
) -> None:
    one = way(Wire(Answer(422, {}, b"")))
    put(sqlite_engine, "a", patient="Eve Brook")
    assert deliver_one(one, "w") == "422"
    assert first(one).state == "failed"
    assert "delivery 1 failed and wants a person: answered 422" in caplog.text
    assert "Eve" not in caplog.text


def test_after_many_tries_a_person_is_called_while_others_get_through(
    way: Callable[..., Way], sqlite_engine: Engine, put: Put, clock: Clock
) -> None:
    one = way(Wire(Answer(500, {}, b"")), tries=3, after=100)
    put(sqlite_engine, "a")
    for _ in range(3):
        assert deliver_one(one, "w") == "500"
        clock.pass_by(60)
    assert first(one).state == "failed"


def test_an_outage_fails_nothing_however_long_it_lasts(
    way: Callable[..., Way], sqlite_engine: Engine, put: Put, clock: Clock
) -> None:
    refused = ClientError("refused", "https://record.example")
    one = way(Wire(*[refused] * 200, DONE), tries=4, after=3)
    for number in range(5):
        put(sqlite_engine, f"e{number}", patient=f"p{number}")
    tries = 0
    while tries < 200:
        tries += bool(deliver_one(one, "w"))
        clock.pass_by(5)
    assert one.outbox.tally().counts["failed"] == 0
    clock.pass_by(120)
    while deliver_one(one, "w"):
        clock.pass_by(1)
    assert one.outbox.tally().counts["delivered"] == 5
    assert one.outbox.tally().failures == 0


@pytest.mark.parametrize("status", [401, 403])
def test_missing_rights_are_an_alarm_and_no_failed_deliveries(
    way: Callable[..., Way], sqlite_engine: Engine, put: Put, caplog: pytest.LogCaptureFixture, status: int
) -> None:
    wire = Wire(Answer(status, {}, b""))
    one = way(wire, tries=2)
    for number in range(4):
        put(sqlite_engine, f"e{number}", patient=f"p{number}")
    kinds = [deliver_one(one, "w") for _ in range(4)]
    # at once nobody else runs into it
    assert kinds == [str(status), "", "", ""]
    assert len(wire.sent) == 1
    assert "nothing can be delivered until this is seen to" in caplog.text


def test_one_delivery_that_is_always_forbidden_does_not_stop_the_others(
    way: Callable[..., Way], sqlite_engine: Engine, put: Put, clock: Clock
) -> None:
    """A record system may refuse one patient's data, by consent say."""
    wire = Wire(Answer(403, {}, b""))
    one = way(wire, tries=3)
    put(sqlite_engine, "forbidden")
    assert deliver_one(one, "w") == "403"
    wire.answers = [DONE]
    put(sqlite_engine, "sound", patient="q")
    clock.pass_by(60)
    assert deliver_one(one, "w") == "delivered"
    found = one.outbox.one(2)
    assert found
    assert found.state == "delivered", "the less tried one finds out whether it is back"


def test_what_timed_out_is_given_the_time_to_end_over_there(
    way: Callable[..., Way], sqlite_engine: Engine, put: Put, clock: Clock
) -> None:
    """Else a later version could arrive before an earlier one that is still being worked on."""
    one = way(Wire(ClientError("timed-out", "https://record.example"), DONE))
    put(sqlite_engine, "a", version=1)
    put(sqlite_engine, "a", version=2)
    assert deliver_one(one, "w") == "timed-out"
    clock.pass_by(29.9)
    assert deliver_one(one, "w") == ""
    clock.pass_by(0.1)
    assert [deliver_one(one, "w") for _ in range(3)] == ["delivered", "delivered", ""]


def test_a_result_that_comes_after_the_lease_is_not_written_over_anothers(
    way: Callable[..., Way], sqlite_engine: Engine, put: Put, clock: Clock, caplog: pytest.LogCaptureFixture
) -> None:
    inner = way(Wire(DONE))

    def slow() -> Answer:
        clock.pass_by(100)
        assert deliver_one(inner, "quick") == "delivered"
        return Answer(500, {}, b"")

    outer = way(Wire(slow))
    put(sqlite_engine, "a")
    assert deliver_one(outer, "slow") == "500"
    assert first(outer).state == "delivered"
    assert "taken over by another worker" in caplog.text


def test_nothing_is_sent_when_the_lease_is_nearly_over(
    way: Callable[..., Way], sqlite_engine: Engine, put: Put, clock: Clock
) -> None:
    """A process that was stopped for a while must not send what another may have sent meanwhile."""
    wire = Wire(DONE)
    one = way(wire)
    put(sqlite_engine, "a")
    claim = one.outbox.claim("w", one.now(), lease=one.lease, after=3)
    assert claim
    clock.pass_by(60)
    verdict = one.post.send(claim.bundle, lambda: one.now() + one.timeout < claim.lease)
    assert (verdict.kind, verdict.meaning, wire.sent) == ("late", "later", [])


def test_what_arrived_while_the_disk_was_full_is_sent_again_and_written_down_later(
    sqlite_engine: Engine, put: Put, way: Callable[..., Way], clock: Clock
) -> None:
    """SQLite tells a page limit that is reached as it tells a full disk (SQLITE_FULL)."""
    large = {"resourceType": "OperationOutcome", "issue": [{"diagnostics": "x" * 60_000}]}
    wire = Wire(Answer(422, {}, json.dumps(large).encode()), DONE)
    one = way(wire)
    put(sqlite_engine, "a")
    with sqlite_engine.connect() as connection:
        pages = connection.exec_driver_sql("PRAGMA page_count").scalar()

    def full(connection: Any, _: object) -> None:
        connection.execute(f"PRAGMA max_page_count={pages}")

    sqlite_engine.dispose()
    event.listen(sqlite_engine, "connect", full)
    with pytest.raises(StorageError):
        deliver_one(one, "w")
    assert first(one).state == "sending", "nothing of the result was written"
    assert deliver_one(one, "w") == ""
    event.remove(sqlite_engine, "connect", full)
    sqlite_engine.dispose()
    clock.pass_by(one.lease / 1000)
    assert deliver_one(one, "w") == "delivered"
    assert first(one).state == "delivered"
    assert [sent["body"] for sent in wire.sent] == [wire.sent[0]["body"]] * 2


def test_workers_go_on_after_the_database_failed_and_finish_what_they_send(
    way: Callable[..., Way], sqlite_engine: Engine, put: Put, monkeypatch: pytest.MonkeyPatch,
    caplog: pytest.LogCaptureFixture,
) -> None:  # fmt: skip
    monkeypatch.setattr("fhirgallop.delivery.worker._BROKEN_SECONDS", 0.01)
    caplog.set_level(logging.INFO, "fhirgallop.delivery")
    sending, go = threading.Event(), threading.Event()

    def slow() -> Answer:
        sending.set()
        go.wait(10)
        return DONE

    one = way(Wire(slow))
    claim, broken = one.outbox.claim, iter([StorageError("OperationalError"), ZeroDivisionError()])

    def failing(*words: Any, **more: Any) -> Any:
        if (error := next(broken, None)) is not None:
            raise error
        return claim(*words, **more)

    monkeypatch.setattr(one.outbox, "claim", failing)
    put(sqlite_engine, "a")
    put(sqlite_engine, "b", patient="q")
    workers = Workers(one, ["w"])
    workers.start()
    assert sending.wait(10)
    assert not workers.stop(0.05), "it still sends"
    go.set()
    assert workers.stop(10)
    assert workers.counts() == {"delivered": 1}
    assert one.outbox.tally().counts["waiting"] == 1, "nothing new is taken after the end was asked for"
    assert "the database failed (OperationalError)" in caplog.text
    assert "unexpected ZeroDivisionError" in caplog.text


def test_idle_workers_end_at_once(way: Callable[..., Way], sqlite_engine: Engine) -> None:
    workers = Workers(way(Wire(DONE)), ["a", "b"])
    workers.start()
    time.sleep(0.05)
    assert workers.stop(5)
