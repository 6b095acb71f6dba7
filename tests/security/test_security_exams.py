"""Examinations and authorisation: nobody writes more than the token permits, or sees others' answers."""

from __future__ import annotations

import json
import time
from collections.abc import Callable
from typing import Any

import pytest
from starlette.testclient import TestClient

Json = dict[str, Any]
WHERE = "/exams?map=fernwood-heart-form"
WRITING = "system/Observation.cu system/DiagnosticReport.cu system/Provenance.cu"
CATEGORY = "http://terminology.hl7.org/CodeSystem/observation-category"


@pytest.fixture
def send(fhir_service: TestClient, authority: Any, access_claims: Any, bearer: Any) -> Callable[..., Any]:
    """A request with a token: `send("GET", "/batches/x", scope=..., client_id="clinic-a")`."""

    def ask(method: str, path: str, body: Any = None, scope: str = WRITING, client_id: str = "sender",
            **headers: str) -> Any:  # fmt: skip
        token = bearer(authority.sign(access_claims(scope, client_id=client_id)))
        return fhir_service.request(method, path, json=body, headers={**token, **headers})

    return ask


@pytest.fixture
def record(root: Any) -> Json:
    found: Json = json.loads((root / "examples/ehr/fernwood-exam.json").read_bytes())
    return found


@pytest.mark.parametrize(
    "scope",
    [
        WRITING.replace("Observation.cu", f"Observation.cu?category={CATEGORY}|vital-signs"),
        WRITING.replace("Observation.cu", "Observation.c"),
        WRITING.replace(" system/Provenance.cu", ""),
        "system/*.rs",
    ],
)
def test_sm_8_an_examination_is_written_whole_or_not_at_all(
    send: Any, record: Json, outcome: Any, scope: str
) -> None:
    """SMART App Launch 2.2: a scope with a search part permits what fits it, and nothing beside."""
    for prefer in ("", "respond-async"):
        assert outcome(send("POST", WHERE, record, scope, Prefer=prefer)) == (
            403,
            "forbidden",
            "auth-forbidden",
        )
    assert send("POST", WHERE, record).status_code == 200


def test_a_batch_is_not_there_for_another_client(send: Any, record: Json, outcome: Any) -> None:
    sent = send("POST", WHERE, [record], client_id="clinic-a", Prefer="respond-async")
    address = sent.headers["content-location"].removeprefix("http://localhost:8470")
    for method, path in (("GET", address), ("GET", f"{address}/results"), ("DELETE", address)):
        assert outcome(send(method, path, client_id="clinic-b"))[0] == 404
    deadline = time.monotonic() + 30
    while (done := send("GET", address, client_id="clinic-a")).status_code == 202:
        assert time.monotonic() < deadline
        time.sleep(0.05)
    assert done.json()["requiresAccessToken"] is True
    assert '"bundle"' in send("GET", f"{address}/results", client_id="clinic-a").text


def test_a_key_opens_no_answer_of_another_client(send: Any, record: Json) -> None:
    key = {"Idempotency-Key": '"the same for both"'}
    first = send("POST", WHERE, record, client_id="clinic-a", **key)
    other = send("POST", WHERE, {**record, "remarks": "another"}, client_id="clinic-b", **key)
    assert (first.status_code, other.status_code) == (200, 200)
    assert "fhirgallop-repeated" not in other.headers
    again = send("POST", WHERE, record, client_id="clinic-a", **key)
    assert again.content == first.content
    stranger = send("POST", WHERE, record, "system/*.rs", client_id="clinic-a", **key)
    assert stranger.status_code == 403, "what was permitted once is asked each time"
