"""The whole exchange over real HTTP with the service in a process of its own."""

from __future__ import annotations

import json
import os
import signal
import socket
import subprocess
import sys
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import httpx
import pytest

Json = dict[str, Any]


@pytest.fixture
def speaking(tmp_path: Path, root: Path, chart_peer: Any) -> Iterator[httpx.Client]:
    """A client of a service that was started from the command line; one record system is listed there."""
    with socket.socket() as taken:
        taken.bind(("127.0.0.1", 0))
        port: int = taken.getsockname()[1]
    running = subprocess.Popen(
        [sys.executable, "-m", "fhirgallop", "serve", "--port", str(port),
         "--maps", str(root / "examples/informatician"), "--database", f"sqlite:///{tmp_path / 'x.sqlite3'}"],
        stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True,
        env={**os.environ, "FHIRGALLOP_LOOPBACK_HTTP": "true", "FHIRGALLOP_CHART_MILLISECONDS": "5000",
             "FHIRGALLOP_CDS_CHARTS": json.dumps({"*": [chart_peer.base]})},
    )  # fmt: skip
    assert running.stderr
    log = ""
    while "running on" not in log.lower():
        line = running.stderr.readline()
        assert line, log
        log += line
    with httpx.Client(base_url=f"http://127.0.0.1:{port}", trust_env=False) as client:
        yield client
    running.send_signal(signal.SIGTERM)
    out, rest = running.communicate(timeout=30)
    log += rest
    calls = [line for line in log.splitlines() if "POST /cds-services/{service_id} " in line]
    assert any("status=200" in line for line in calls)
    assert "of-this-call" not in log + out, "no token in the log"
    assert "20417" not in log + out, "no patient's number in the log"
    assert "Traceback" not in log


def test_discovery_cards_feedback(
    speaking: httpx.Client, example: Callable[..., Json], prefetch: Callable[..., Json]
) -> None:
    """An examination is coded, its Bundle held against the chart as a draft, the card answered."""
    coded = speaking.post("/exams?map=fernwood-heart-form", json=example()).json()
    found = prefetch(exam=None)
    (service,) = [
        one
        for one in speaking.get("/cds-services").json()["services"]
        if one["hook"] == "org.fhirgallop.exam-draft"
    ]
    call = {
        "hook": service["hook"],
        "hookInstance": "d1577c69-dfbe-44ad-ba6d-3e05e953b2ea",
        "context": {"userId": "Practitioner/7", "patientId": "p-20417", "draftObservations": coded["bundle"]},
    }
    address = f"/cds-services/{service['id']}"
    assert speaking.post(address, json=call).status_code == 412, "without prefetch"
    part = {"patient": found["patient"], "results": found["results"]}
    partial = speaking.post(address, json={**call, "prefetch": part}).json()["cards"]
    assert "not sent: earlier examinations" in partial[0]["detail"]
    assert set(service["prefetch"]) == set(found)
    whole = {**call, "prefetch": found, "hookInstance": "d1577c69-dfbe-44ad-ba6d-3e05e953b2eb"}
    whole["context"] = {**call["context"], "userId": "Practitioner/8"}
    (card,) = speaking.post(address, json=whole).json()["cards"]
    assert "Unknown to this review" not in card["detail"]
    assert "Cardiac rhythm: Atrial fibrillation" in card["detail"]
    report = {
        "card": card["uuid"],
        "outcome": "overridden",
        "overrideReason": {"reason": card["overrideReasons"][0]},
        "outcomeTimestamp": "2026-12-01T08:00:00Z",
    }
    assert speaking.post(f"{address}/feedback", json={"feedback": [report]}).status_code == 200
    counted = speaking.get("/cds-feedback").json()["rules"]
    assert {one["overridden"] for one in counted} == {1}


def test_what_was_left_out_is_read_from_the_listed_server(
    speaking: httpx.Client, example: Callable[..., Json], chart_peer: Any
) -> None:
    """Three processes: a client, the service, and the record system's FHIR server."""
    call = {
        "hook": "org.fhirgallop.exam-draft",
        "hookInstance": "d1577c69-dfbe-44ad-ba6d-3e05e953b2ea",
        "fhirServer": chart_peer.base,
        "fhirAuthorization": {
            "access_token": "of-this-call", "token_type": "Bearer", "expires_in": 60, "subject": "g",
            "scope": "user/*.rs",
        },
        "context": {
            "userId": "Practitioner/7", "patientId": "p-20417",
            "record": example(), "map": "fernwood-heart-form",
        },
    }  # fmt: skip
    (card,) = speaking.post("/cds-services/exam-review-draft", json=call).json()["cards"]
    assert "Cardiac rhythm: Atrial fibrillation" in card["detail"]
    assert "Unknown to this review" not in card["detail"]
    asked = chart_peer.asked()
    assert {one["headers"]["Authorization"] for one in asked} == {"Bearer of-this-call"}
