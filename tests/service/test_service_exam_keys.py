"""Idempotency-Key: the same request again does nothing and gets the same bytes, whenever the service dies."""

from __future__ import annotations

import contextlib
import json
import os
import random
import time
from collections.abc import Callable, Iterator
from concurrent.futures import ThreadPoolExecutor
from datetime import timedelta
from pathlib import Path
from typing import Any

import httpx
import pytest
from fastapi import FastAPI
from sqlalchemy import func, select
from starlette.requests import Request
from starlette.testclient import TestClient

from fhirgallop import settings
from fhirgallop.service.answers import RefusalError
from fhirgallop.service.app import create_app
from fhirgallop.service.auth.caller import Caller
from fhirgallop.service.keyed import keyed
from fhirgallop.storage.engine import connect
from fhirgallop.storage.tables import idempotent_answers, submissions

WHERE = "/exams?map=fernwood-heart-form"
KEY = {"Idempotency-Key": '"8e03978e-40d5-43dd-bc93-6894a57f9324"'}
AGAIN = "fhirgallop-repeated"
# how often the service is killed, on each database, and how many examinations there are; full size: 20, 200
KILLS = int(os.environ.get("GALLOP_KILLS", "1"))
EXAMS = int(os.environ.get("GALLOP_EXAMS", "16"))


def rule(answer: Any) -> str:
    found: str = answer.json()["issue"][0]["details"]["coding"][0]["code"]
    return found


def count(application: FastAPI, table: Any) -> int:
    engine = application.state.exams._examinations._store._engine
    with engine.connect() as connection:
        return int(connection.scalar(select(func.count()).select_from(table)) or 0)


def test_the_same_request_gets_the_same_bytes_whatever_came_between(
    application: FastAPI, client: Any, example: Any
) -> None:
    first = client.post(WHERE, json=example(), headers=KEY)
    client.post(WHERE, json=example(vitals={"hr": 90}))
    again = client.post(WHERE, json=example(), headers=KEY)
    assert (again.status_code, again.content) == (200, first.content)
    assert AGAIN not in first.headers
    assert again.headers[AGAIN] == "true"
    assert again.headers["content-type"] == first.headers["content-type"]
    assert count(application, submissions) == 2, "the repetition was no third version"
    without = client.post(WHERE, json=example()).json()["outcome"]["issue"]
    assert "exam-earlier-content-again" in json.dumps(without), "what the key has kept from happening"


def test_the_bare_bundle_comes_again_with_its_headers(client: Any, example: Any) -> None:
    headers = {**KEY, "Accept": "application/fhir+json"}
    first = client.post(WHERE, json={**example(), "shoe": "43"}, headers=headers)
    again = client.post(WHERE, json={**example(), "shoe": "43"}, headers=headers)
    assert again.content == first.content
    assert again.headers["fhirgallop-issues"] == first.headers["fhirgallop-issues"] == "1"


@pytest.mark.parametrize(
    ("where", "headers"),
    [(WHERE + "&edition=R5", {}), (WHERE + "&review=none", {}), (WHERE, {"Accept": "application/fhir+json"})],
)
def test_a_key_belongs_to_one_request(client: Any, example: Any, where: str, headers: Any) -> None:
    assert client.post(WHERE, json=example(), headers=KEY).status_code == 200
    other = client.post(where, json=example(), headers={**KEY, **headers})
    assert (other.status_code, rule(other)) == (422, "http-idempotency-key-reused")
    changed = client.post(WHERE, json=example(vitals={"hr": 90}), headers=KEY)
    assert (changed.status_code, rule(changed)) == (422, "http-idempotency-key-reused")


def test_bare_and_quoted_keys_are_the_same(client: Any, example: Any) -> None:
    client.post(WHERE, json=example(), headers=KEY)
    bare = {"Idempotency-Key": KEY["Idempotency-Key"].strip('"')}
    assert client.post(WHERE, json=example(), headers=bare).headers[AGAIN] == "true"


@pytest.mark.parametrize(
    "key", ["", '""', '"short"', "x" * 201, '"a key with a \ttab"', '"open', "a b c d e f"]
)
def test_a_malformed_key_is_refused(application: FastAPI, client: Any, example: Any, key: str) -> None:
    answer = client.post(WHERE, json=example(), headers={"Idempotency-Key": key})
    assert (answer.status_code, rule(answer)) == (400, "http-idempotency-key")
    assert count(application, submissions) == 0


def test_what_was_refused_may_be_mended_under_the_same_key(client: Any, example: Any) -> None:
    assert client.post(WHERE, json=example(heart={"s4": "thundering"}), headers=KEY).status_code == 422
    mended = client.post(WHERE, json=example(), headers=KEY)
    assert (mended.status_code, AGAIN in mended.headers) == (200, False)


def test_a_key_is_forgotten_after_its_time(application: FastAPI, client: Any, example: Any) -> None:
    client.post(WHERE, json=example(), headers=KEY)
    application.state.clock.at += timedelta(hours=23)
    assert AGAIN in client.post(WHERE, json=example(), headers=KEY).headers
    application.state.clock.at += timedelta(hours=2)
    fresh = client.post(WHERE, json=example(vitals={"hr": 90}), headers=KEY)
    assert (fresh.status_code, AGAIN in fresh.headers) == (200, False)


def test_lists_have_keys_too(application: FastAPI, client: Any, example: Any) -> None:
    records = [example(exam={"number": "A"}), example(exam={"number": "B"}, heart={"s4": "thundering"})]
    first = client.post(WHERE, json=records, headers=KEY)
    assert first.json()["coded"] == 1
    again = client.post(WHERE, json=records, headers=KEY)
    assert (again.content, again.headers[AGAIN]) == (first.content, "true")
    assert client.post(WHERE, json=records[:1], headers=KEY).status_code == 422
    assert count(application, idempotent_answers) == 1


def test_a_list_that_broke_off_is_done_again_under_its_key(
    application: FastAPI, client: Any, example: Any
) -> None:
    records = [example(exam={"number": number}) for number in "AB"]
    desk = application.state.exams
    each = desk._each
    desk._each = lambda *_: (_ for _ in ()).throw(ZeroDivisionError)
    assert client.post(WHERE, json=records, headers=KEY).status_code == 500
    desk._each = each
    assert client.post(WHERE, json=records[:1], headers=KEY).status_code == 422, "the key is taken"
    whole = client.post(WHERE, json=records, headers=KEY)
    assert (whole.json()["coded"], AGAIN in whole.headers) == (2, False)
    assert client.post(WHERE, json=records, headers=KEY).content == whole.content


def test_messages_have_keys_too(client: Any, root: Path) -> None:
    message = (root / "examples/ehr/fernwood-exam.hl7").read_bytes()
    headers = {**KEY, "Content-Type": "application/hl7-v2", "Accept": "application/hl7-v2"}
    first = client.post(WHERE, content=message, headers=headers)
    again = client.post(WHERE, content=message, headers=headers)
    assert again.content == first.content, "with the same control id"
    assert again.headers[AGAIN] == "true"


def test_a_message_that_was_refused_may_be_mended_under_the_same_key(client: Any, root: Path) -> None:
    message = (root / "examples/ehr/fernwood-exam.hl7").read_bytes()
    headers = {**KEY, "Content-Type": "application/hl7-v2", "Accept": "application/hl7-v2"}
    wrong = client.post(WHERE, content=message.replace(b"left^left", b"x^x"), headers=headers)
    assert b"MSA|AE" in wrong.content
    assert b"MSA|AA" in client.post(WHERE, content=message, headers=headers).content


def test_a_form_is_the_same_whatever_stands_between_its_parts(client: Any, example: Any, root: Path) -> None:
    chart = (root / "examples/clinician/atrial-fibrillation-today.chart.json").read_bytes()
    answers = []
    for boundary in (b"one", b"two"):
        body = b"".join(
            b"--%b\r\nContent-Disposition: form-data; name=%b\r\n\r\n%b\r\n" % (boundary, name, text)
            for name, text in ((b"record", json.dumps(example()).encode()), (b"chart", chart))
        )
        kind = f"multipart/form-data; boundary={boundary.decode()}"
        headers = {**KEY, "Content-Type": kind}
        answers.append(client.post(WHERE, content=body + b"--%b--" % boundary, headers=headers))
    assert [answer.status_code for answer in answers] == [200, 200]
    assert answers[1].headers[AGAIN] == "true"


def test_keys_of_two_callers_are_two_keys() -> None:
    def asked(caller: Caller, *keys: str) -> Any:
        headers = [(b"idempotency-key", key.encode()) for key in keys]
        scope = {"type": "http", "method": "POST", "path": "/exams", "query_string": b"", "headers": headers,
                 "state": {"caller": caller}}  # fmt: skip
        return keyed(Request(scope), "application/json", b"{}")

    one, two = Caller("system", "clinic-a"), Caller("system", "clinic-b")
    assert asked(one, "abcdefgh").key == asked(one, '"abcdefgh"').key != asked(two, "abcdefgh").key
    assert asked(one) is None
    with pytest.raises(RefusalError):
        asked(one, "abcdefgh", "abcdefgi")


@pytest.fixture(params=["sqlite", "postgres"])
def anywhere(request: pytest.FixtureRequest, tmp_path: Path, root: Path) -> Iterator[Any]:
    """The service on either database."""
    address = f"sqlite:///{tmp_path / 'k.sqlite3'}"
    if request.param == "postgres":
        address = request.getfixturevalue("postgres")
    chosen = settings.load(maps=root / "examples/informatician", database=address, batch_workers=0)
    with TestClient(create_app(chosen), base_url="http://localhost") as speaking:
        yield speaking


def test_of_many_at_once_one_does_it_and_all_get_its_answer(anywhere: Any, example: Any) -> None:
    with ThreadPoolExecutor(8) as pool:
        answers = list(pool.map(lambda _: anywhere.post(WHERE, json=example(), headers=KEY), range(8)))
    assert {answer.status_code for answer in answers} == {200}
    assert len({answer.content for answer in answers}) == 1
    assert count(anywhere.app, submissions) == count(anywhere.app, idempotent_answers) == 1


def test_of_different_requests_at_once_under_one_key_one_is_kept(anywhere: Any, example: Any) -> None:
    records = [example(exam={"number": f"N-{number}"}) for number in range(8)]
    with ThreadPoolExecutor(8) as pool:
        answers = list(pool.map(lambda record: anywhere.post(WHERE, json=record, headers=KEY), records))
    assert sorted(answer.status_code for answer in answers) == [200] + [422] * 7
    assert count(anywhere.app, submissions) == count(anywhere.app, idempotent_answers) == 1


@pytest.mark.parametrize("kind", ["sqlite", "postgres"])
def test_sudden_death_leaves_both_or_neither(
    kind: str, request: pytest.FixtureRequest, serving: Callable[..., Any], example: Any
) -> None:
    """SIGKILL while examinations come in: what is kept has its answer; what is sent again is kept once."""
    address = {} if kind == "sqlite" else {"DATABASE": request.getfixturevalue("postgres")}
    service = serving(**address)
    rng = random.Random(20261201)
    records = [example(exam={"number": f"N-{number}"}) for number in range(EXAMS)]
    answers: dict[int, bytes] = {}

    def send(number: int) -> None:
        headers = {"Idempotency-Key": f"key-number-{number}"}
        with contextlib.suppress(httpx.TransportError):
            answer = httpx.post(service.base + WHERE, json=records[number], headers=headers, trust_env=False)
            assert answer.status_code == 200
            assert answers.setdefault(number, answer.content) == answer.content

    for _ in range(KILLS):
        send(rng.randrange(EXAMS))  # a process that has just started reads the base definitions first
        with ThreadPoolExecutor(4) as pool:
            sent = pool.map(send, rng.sample(range(EXAMS), EXAMS // 2))
            time.sleep(rng.uniform(0.02, 0.25))
            service.kill()
            list(sent)
        versions, kept = _kept(service.database)
        assert set(versions) == {1}
        assert kept == len(versions), "an examination and its answer are kept together"
        service.start()
    assert kept > 0
    for number in range(EXAMS):
        send(number)
    assert len(answers) == EXAMS
    assert _kept(service.database) == ([1] * EXAMS, EXAMS)


def _kept(database: str) -> tuple[list[int], int]:
    """The version of each examination that is kept, and how many answers are."""
    engine = connect(database)
    with engine.connect() as connection:
        versions = list(connection.scalars(select(submissions.c.version)))
        kept = connection.scalar(select(func.count()).select_from(idempotent_answers))
    engine.dispose()
    return versions, kept or 0
