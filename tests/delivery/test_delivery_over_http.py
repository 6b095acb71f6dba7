"""Delivery over real HTTP to a record system that is a process of its own; the service, the commands."""

from __future__ import annotations

import json
import signal
import time
from collections.abc import Callable
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import pytest
from joserfc.jwk import ECKey, RSAKey
from sqlalchemy import Engine
from starlette.testclient import TestClient

from fhirgallop import settings
from fhirgallop.api import process
from fhirgallop.codes import fhirjson
from fhirgallop.conformance.validator import validate
from fhirgallop.delivery.dispatch import Dispatch, open_dispatch
from fhirgallop.delivery.keys import KEPT_SECONDS, public_set, read_keys
from fhirgallop.service.app import create_app
from fhirgallop.storage.audit import AuditTrail
from fhirgallop.storage.engine import open_database
from fhirgallop.storage.keys import patient_key
from fhirgallop.storage.outbox import Outbox, Rest, Settled, Tally

Put = Callable[..., None]
MAP = "fernwood-heart-form"
QUICK = {"loopback_http": True, "delivery_wait": 0.05, "delivery_wait_most": 0.2, "delivery_rest": 0.1}


@pytest.fixture(scope="module")
def bundle(root: Path) -> bytes:
    """The example examination's Bundle: 36 resources."""
    record = (root / "examples/ehr/fernwood-exam.json").read_bytes()
    result = process(record, root / f"examples/informatician/{MAP}.yaml")
    return fhirjson.write(result.bundle)


def now() -> datetime:
    return datetime.now(tz=UTC)


@pytest.fixture
def deliver() -> Any:
    """Starts delivery from a database: `deliver(engine, deliver_to=...)`."""
    started: list[Dispatch] = []

    def start(engine: Engine, threads: int = 1, **given: Any) -> Dispatch:
        dispatch = open_dispatch(settings.load(**QUICK, **given), engine, now, threads=threads)
        assert dispatch
        dispatch.workers.start()
        started.append(dispatch)
        return dispatch

    yield start
    for dispatch in started:
        assert dispatch.stop(20)


def until(engine: Engine, wanted: Callable[[Tally], bool], seconds: float = 30) -> Tally:
    """The outbox as soon as it is as wanted."""
    box, deadline = Outbox(engine), time.monotonic() + seconds
    while not wanted(tally := box.tally()):
        assert time.monotonic() < deadline, tally
        time.sleep(0.02)
    return tally


def keys(folder: Path, *made: RSAKey | ECKey) -> Path:
    path = folder / "private.json"
    path.write_text(json.dumps({"keys": [key.as_dict(private=True) for key in made]}), "utf-8")
    return path


@pytest.mark.parametrize("kind", ["RS384", "ES384"])
def test_sm_11_12_13_an_examination_arrives_behind_a_sign_in(
    kind: str, tmp_path: Path, sqlite_engine: Engine, put: Put, receiver: Any, deliver: Any, bundle: bytes
) -> None:
    made = RSAKey.generate_key(2048) if kind == "RS384" else ECKey.generate_key("P-384")
    path = keys(tmp_path, made)
    (tmp_path / "public.json").write_bytes(public_set(read_keys(path)))
    peer = receiver("--keys", str(tmp_path / "public.json"), "--client", "gallop-1")
    put(sqlite_engine, "a", bundle=bundle)
    deliver(sqlite_engine, deliver_to=peer.base, deliver_client="gallop-1", deliver_key=path)
    until(sqlite_engine, lambda tally: tally.counts["delivered"] == 1)
    found = Outbox(sqlite_engine).one(1)
    assert found
    entries = json.loads(found.outcome or b"")["entry"]
    assert len(entries) == len(json.loads(bundle)["entry"])
    assert {entry["status"] for entry in entries} == {"201 Created"}
    assert all(entry["etag"] == 'W/"1"' and "/_history/1" in entry["location"] for entry in entries)
    assert peer.rows("SELECT count(*) FROM resources") == [(len(entries),)]


def test_a_key_that_is_not_known_there_is_an_alarm(
    tmp_path: Path, sqlite_engine: Engine, put: Put, receiver: Any, deliver: Any, bundle: bytes,
    caplog: pytest.LogCaptureFixture,
) -> None:  # fmt: skip
    path = keys(tmp_path, ECKey.generate_key("P-384"))
    (tmp_path / "public.json").write_bytes(public_set(read_keys(path)))
    peer = receiver("--keys", str(tmp_path / "public.json"))
    put(sqlite_engine, "a", bundle=bundle)
    other = keys(tmp_path, ECKey.generate_key("P-384"))
    deliver(sqlite_engine, deliver_to=peer.base, deliver_client="fhirgallop", deliver_key=other)
    tally = until(sqlite_engine, lambda tally: tally.failures > 0)
    assert tally.counts["failed"] == 0
    assert "the token endpoint answered 400 (invalid_client)" in caplog.text
    assert peer.rows("SELECT count(*) FROM events") == [(0,)]


def test_a_record_system_that_is_down_gets_everything_when_it_is_back(
    engine: Engine, put: Put, receiver: Any, deliver: Any, bundle: bytes
) -> None:
    peer = receiver()
    peer.kill()
    put(engine, "a", bundle=bundle)
    dispatch = deliver(engine, 2, deliver_to=peer.base)
    until(engine, lambda tally: tally.failures >= 5)
    assert dispatch.workers.counts()["refused"] >= 5
    peer.start()
    until(engine, lambda tally: tally.counts["delivered"] == 1)
    assert until(engine, lambda tally: True).failures == 0


def test_a_database_that_restarts_is_waited_for(
    postgres_server: Any, postgres: str, put: Put, receiver: Any, deliver: Any, bundle: bytes
) -> None:
    """Crash of the database in the midst: nothing lost, nothing doubled, the workers go on by themselves."""
    peer, many = receiver(), 40
    engine = open_database(postgres)
    small = json.loads(bundle)
    small["entry"] = small["entry"][-2:]
    for number in range(many):
        text = json.dumps(small).replace(small["entry"][0]["fullUrl"], f"urn:uuid:{number:036}")
        put(engine, f"e{number}", patient=f"p{number}", bundle=text.encode())
    # what was in hand when it crashed comes back when its lease, some seconds of a short timeout, is over
    dispatch = deliver(engine, 3, deliver_to=peer.base, delivery_timeout=1)
    until(engine, lambda tally: tally.counts["delivered"] >= 3)
    postgres_server.stop(signal.SIGQUIT)
    time.sleep(0.3)
    postgres_server.start()
    until(engine, lambda tally: tally.counts["delivered"] == many, seconds=90)
    assert peer.rows("SELECT count(*) FROM resources WHERE type = 'DiagnosticReport'") == [(many,)]
    assert peer.rows("SELECT count(*) FROM resources WHERE version > 1") == [(0,)]
    assert dispatch.stop(20)
    engine.dispose()


def test_the_service_delivers_what_is_written_as_the_site_delivers(
    tmp_path: Path, root: Path, receiver: Any
) -> None:
    peer = receiver()
    address = f"sqlite:///{tmp_path / 'service.sqlite3'}"
    chosen = settings.load(
        maps=root / "examples/informatician", database=address, deliver_to=peer.base, **QUICK
    )
    record = (root / "examples/ehr/fernwood-exam.json").read_bytes()
    header = {"Content-Type": "application/json"}
    with TestClient(create_app(chosen), base_url="http://localhost") as client:
        for wish in ("edition=R5", "snomed=false", "edition=R4", "edition=R4"):
            answer = client.post(f"/exams?map={MAP}&{wish}", content=record, headers=header)
            assert answer.status_code == 200
        sent = answer.json()["bundle"]
        engine = open_database(address)
        tally = until(engine, lambda tally: tally.counts["delivered"] == 1)
        assert sum(tally.counts.values()) == 1, "other editions are kept, not delivered; a repetition is none"
        amended = record.replace(b'"hr": 78', b'"hr": 80')
        assert client.post(f"/exams?map={MAP}", content=amended, headers=header).status_code == 200
        until(engine, lambda tally: tally.counts["delivered"] == 2)
        told = client.get("/metrics").text
        events = [json.loads(row.event) for row in AuditTrail(engine).read()]
    assert 'fhirgallop_delivery_tries{result="delivered"} 2.0' in told
    assert 'fhirgallop_deliveries{state="delivered"} 2.0' in told
    assert peer.rows("SELECT created, updated > 0 FROM events") == [(len(sent["entry"]), 0), (1, 1)]
    out = [event for event in events if event["subtype"][0]["code"] == "transaction"]
    assert [(event["action"], event["outcome"]) for event in out] == [("E", "0")] * 2
    for event, (request,) in zip(out, peer.rows("SELECT request FROM events"), strict=True):
        we, they = event["agent"]
        assert we["requestor"]
        assert they["who"]["identifier"]["value"] == peer.base.removesuffix("/fhir")
        patient, exam, asked = event["entity"]
        assert patient["what"]["identifier"]["value"] == patient_key(
            "https://fernwood.example/patients", "F-20417"
        )
        assert exam["what"]["identifier"]["value"].startswith("urn:uuid:")
        assert asked["what"]["identifier"]["value"] == request
        assert not [issue for issue in validate(event, "R4") if issue.is_error], "by our own judge"
    engine.dispose()


def test_without_an_endpoint_nothing_is_noted(tmp_path: Path, root: Path) -> None:
    address = f"sqlite:///{tmp_path / 'service.sqlite3'}"
    chosen = settings.load(maps=root / "examples/informatician", database=address)
    record = (root / "examples/ehr/fernwood-exam.json").read_bytes()
    with TestClient(create_app(chosen), base_url="http://localhost") as client:
        client.post(f"/exams?map={MAP}", content=record, headers={"Content-Type": "application/json"})
    engine = open_database(address)
    assert Outbox(engine).tally().oldest is None
    engine.dispose()


def test_sm_16_our_public_keys_are_published_with_how_long_they_may_be_kept(
    tmp_path: Path, root: Path
) -> None:
    path = keys(tmp_path, RSAKey.generate_key(2048), ECKey.generate_key("P-384"))
    chosen = settings.load(
        maps=root / "examples/informatician", database=f"sqlite:///{tmp_path / 'service.sqlite3'}",
        deliver_to="https://record.example/fhir", deliver_client="gallop-1", deliver_key=path,
        delivery_workers=0,
    )  # fmt: skip
    with TestClient(create_app(chosen), base_url="http://localhost") as client:
        answer = client.get("/.well-known/jwks.json")
    assert answer.headers["content-type"].startswith("application/json")
    assert answer.headers["cache-control"] == f"public, max-age={KEPT_SECONDS}"
    assert answer.content == public_set(read_keys(path))
    assert [key["alg"] for key in answer.json()["keys"]] == ["RS384", "ES384"], "old and new overlap"


@pytest.mark.parametrize(
    ("given", "said"),
    [
        ({"deliver_to": "http://record.example/fhir"}, "https"),
        ({"deliver_to": "https://u@record.example/fhir"}, "https://host/path"),
        ({"deliver_to": "http://127.0.0.1:1/fhir"}, "LOOPBACK_HTTP"),
        ({"deliver_to": "https://r.example/f", "deliver_client": "x"}, "give both, or none"),
        ({"deliver_client": "x", "deliver_key": "k"}, "name the endpoint"),
    ],
)
def test_settings_that_cannot_be_meant_are_refused(given: dict[str, Any], said: str) -> None:
    with pytest.raises(settings.SettingsError, match=said):
        settings.load(**given)


@pytest.fixture
def commands(
    tmp_path: Path, sqlite_engine: Engine, monkeypatch: pytest.MonkeyPatch, call: Callable[..., Any]
) -> Callable[..., Any]:
    """`fhirgallop deliveries ...` on the test's database."""
    monkeypatch.setenv("FHIRGALLOP_DATABASE", f"sqlite:///{tmp_path / 'd.sqlite3'}")
    return lambda *words: call("deliveries", *words)


def test_failed_deliveries_are_found_explained_and_sent_again_by_one_command(
    commands: Any, sqlite_engine: Engine, put: Put, receiver: Any, bundle: bytes,
    monkeypatch: pytest.MonkeyPatch,
) -> None:  # fmt: skip
    monkeypatch.setattr("fhirgallop.cli.deliveries.signal.signal", lambda *_: None)
    peer = receiver()
    monkeypatch.setenv("FHIRGALLOP_LOOPBACK_HTTP", "true")
    wrong = bundle.replace(b'"transaction"', b'"batch"')
    put(sqlite_engine, "a", bundle=wrong)
    put(sqlite_engine, "b", patient="q", bundle=bundle)

    monkeypatch.setenv("FHIRGALLOP_DELIVER_TO", peer.base)
    done = commands("work", "--until-empty")
    assert (done.code, done.err.splitlines()[-1]) == (0, "1 400, 1 delivered")
    listed = commands("list")
    assert listed.code == 1
    assert listed.out.decode() == "1\tfailed\t1 tries: answered 400: invalid at Bundle.type\n"
    assert "1 failed" in listed.err
    assert commands("list", "--state", "delivered").out.decode() == "2\tdelivered\t1 tries\n"

    shown = commands("show", "1")
    assert "F-1" not in shown.out.decode()
    assert "of patient F-1" in commands("show", "1", "--answer").out.decode()
    assert "entry[35] 201 Created Provenance/" in commands("show", "2").out.decode()
    assert commands("show", "9").code == 1

    assert commands("retry", "--all").err == "1 to be sent again\n"
    assert commands("list", "--state", "waiting").out.decode().startswith("1\twaiting\tnext try 20")
    assert commands("work", "--until-empty").err.splitlines()[-1] == "1 400"
    assert commands("retry", "1").code == 0
    assert commands("drop", "1", "--yes").err == "1 given up\n"
    assert commands("list").code == 0
    assert commands("drop", "1", "--yes").code == 1
    assert commands("retry").code == 2
    assert commands("retry", "1", "--all").code == 2


def test_a_rest_is_told_and_ended_by_one_command(
    commands: Any, sqlite_engine: Engine, put: Put, bundle: bytes
) -> None:
    put(sqlite_engine, "a", bundle=bundle)
    box = Outbox(sqlite_engine)
    claim = box.claim("w", 1, lease=9, after=1)
    assert claim
    later = round(now().timestamp() * 1000) + 600_000
    assert box.settle(claim, Settled("waiting", "answered 403", due=0), Rest(1, lambda _: later))
    assert "the record system rests until" in commands("list").err
    done = commands("retry", "--all")
    assert (done.code, done.err) == (0, "the record system is asked at once\n")
    assert commands("retry", "--all").code == 1


def test_work_without_an_endpoint_says_what_to_set(commands: Any, sqlite_engine: Engine) -> None:
    done = commands("work")
    assert done.code == 3
    assert "FHIRGALLOP_DELIVER_TO" in done.err
