"""The whole CDS Hooks exchange over real HTTP: client and service are processes, every call is signed."""

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

import pytest

from fhirgallop.api import process
from fhirgallop.codes import fhirjson

Json = dict[str, Any]
DRAFT = "/cds-services/exam-review-draft"
VIEW = "/cds-services/exam-review-patient-view"


class Exchange:
    """A client process and the service it speaks to."""

    def __init__(self, client: subprocess.Popen[str], address: str) -> None:
        self._client = client
        self.address = address

    def send(self, method: str, path: str, body: Any = None, **how: str) -> Json:
        call = {"service": self.address, "method": method, "path": path, **how}
        if body is not None:
            call["body"] = body
        assert self._client.stdin
        assert self._client.stdout
        self._client.stdin.write(json.dumps(call) + "\n")
        self._client.stdin.flush()
        answer: Json = json.loads(self._client.stdout.readline())
        return answer


@pytest.fixture
def exchange(tmp_path: Path, root: Path) -> Iterator[Exchange]:
    """Client and service, started; afterwards the service's log is looked through."""
    client = subprocess.Popen(
        [sys.executable, str(root / "tests/peers/cds_client.py")],
        stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True,
    )  # fmt: skip
    assert client.stdout
    jku = client.stdout.readline().strip()
    with socket.socket() as taken:
        taken.bind(("127.0.0.1", 0))
        port: int = taken.getsockname()[1]
    address = f"http://127.0.0.1:{port}"
    env = {
        "FHIRGALLOP_CDS_CLIENTS": json.dumps({"https://ehr.example/cds": [jku]}),
        "FHIRGALLOP_ADDRESS": address,
        "FHIRGALLOP_LOOPBACK_HTTP": "true",
    }
    service = subprocess.Popen(
        [sys.executable, "-m", "fhirgallop", "serve", "--port", str(port),
         "--maps", str(root / "examples/informatician"), "--database", f"sqlite:///{tmp_path / 'x.sqlite3'}"],
        stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, env={**os.environ, **env},
    )  # fmt: skip
    assert service.stderr
    log = ""
    while "running on" not in log.lower():
        line = service.stderr.readline()
        assert line, log
        log += line
    yield Exchange(client, address)
    client.communicate(timeout=30)
    service.send_signal(signal.SIGTERM)
    out, rest = service.communicate(timeout=30)
    log += rest + out
    assert "token refused" in log
    for unwanted in ("Bearer ", "eyJ", "20417", "Traceback", "Exception in", "[error"):
        assert unwanted not in log, log


@pytest.fixture
def draft(root: Path) -> Json:
    """The example examination as a draft Bundle."""
    record = (root / "examples/ehr/fernwood-exam.json").read_bytes()
    result = process(record, root / "examples/informatician/fernwood-heart-form.yaml")
    found: Json = json.loads(fhirjson.write(result.bundle))
    return found


def test_the_whole_exchange_signed(
    exchange: Exchange, draft: Json, prefetch: Callable[..., Json], hook_call: Callable[..., Json]
) -> None:
    """Discovery, cards with prefetch complete, partial and absent, feedback; and all of it unsigned."""
    services = exchange.send("GET", "/cds-services")
    assert services["status"] == 200
    assert DRAFT in {f"/cds-services/{one['id']}" for one in services["body"]["services"]}

    call = {
        "hook": "org.fhirgallop.exam-draft",
        "hookInstance": "d1577c69-dfbe-44ad-ba6d-3e05e953b2ea",
        "context": {"userId": "Practitioner/7", "patientId": "p-20417", "draftObservations": draft},
    }
    found = prefetch(exam=None)
    absent = exchange.send("POST", DRAFT, call)
    assert absent["status"] == 412
    assert absent["body"]["resourceType"] == "OperationOutcome"

    part = {"patient": found["patient"], "results": found["results"]}
    partial = exchange.send("POST", DRAFT, {**call, "prefetch": part})
    assert partial["status"] == 200
    assert "not sent: earlier examinations" in partial["body"]["cards"][0]["detail"]

    whole = {**call, "prefetch": found, "hookInstance": "d1577c69-dfbe-44ad-ba6d-3e05e953b2eb"}
    whole["context"] = {**call["context"], "userId": "Practitioner/8"}
    (card,) = exchange.send("POST", DRAFT, whole, sign="rotated")["body"]["cards"]
    assert "Unknown to this review" not in card["detail"]
    assert "Cardiac rhythm: Atrial fibrillation" in card["detail"]

    report = {
        "card": card["uuid"], "outcome": "overridden",
        "overrideReason": {"reason": card["overrideReasons"][0]},
        "outcomeTimestamp": "2026-12-01T08:00:00Z",
    }  # fmt: skip
    body = {"feedback": [report]}
    assert exchange.send("POST", f"{DRAFT}/feedback", body)["status"] == 200
    assert exchange.send("POST", VIEW, hook_call())["status"] == 200

    for how in ({"sign": "none"}, {"sign": "again"}, {"sign": "other"}, {"aud": exchange.address}):
        for method, path, sent in (
            ("GET", "/cds-services", None), ("POST", DRAFT, whole), ("POST", f"{DRAFT}/feedback", body),
        ):  # fmt: skip
            refused = exchange.send(method, path, sent, **how)
            assert refused["status"] == 401, (how, path)
            assert refused["headers"]["www-authenticate"].startswith("Bearer")
            (issue,) = refused["body"]["issue"]
            assert issue["code"] == "login"
            assert "cards" not in refused["body"]
