"""A running service before hostile clients: slow, large and odd ones; and what its log says afterwards."""

from __future__ import annotations

import hashlib
import json
import socket
import time
import uuid
from collections import Counter
from collections.abc import Callable, Iterator
from contextlib import ExitStack
from pathlib import Path
from typing import Any

import httpx
import pytest

ADMIN = "a token of the administrators 0123456789"
WHERE = "/exams?map=fernwood-heart-form"
SLOW = 80  # connections of each kind
EVERYTHING = "system/*.cruds"


class Service:
    """A running service with every way in, and tokens for it."""

    def __init__(self, running: Any, ehr: Any, authority: Any) -> None:
        self.running = running
        self.home = f"http://127.0.0.1:{running.port}"
        self.ehr = ehr
        self.authority = authority
        self.tokens: list[str] = [ADMIN]
        self.client = httpx.Client(base_url=self.home, trust_env=False, timeout=60)

    def access(self, scope: str = EVERYTHING, **changed: Any) -> dict[str, str]:
        now = int(time.time())
        claims = {"iss": "https://login.example", "aud": self.home, "iat": now, "exp": now + 300,
                  "client_id": "sender", "scope": scope, "jti": str(uuid.uuid4()), **changed}  # fmt: skip
        return self._header(self.authority.sign(claims))

    def own(self, path: str, **changed: Any) -> dict[str, str]:
        now = int(time.time())
        claims = {"iss": "https://ehr.example", "aud": self.home + path, "iat": now, "exp": now + 60,
                  "jti": str(uuid.uuid4()), **changed}  # fmt: skip
        return self._header(self.ehr.sign(claims))

    def _header(self, token: str) -> dict[str, str]:
        self.tokens.append(token)
        return {"Authorization": f"Bearer {token}"}

    def connect(self) -> socket.socket:
        return socket.create_connection(("127.0.0.1", self.running.port), timeout=30)


@pytest.fixture
def service(started: Callable[..., Any], ehr: Any, authority: Any, tmp_path: Path) -> Iterator[Service]:
    """The service; keys come from files."""
    for name, signer in (("ehr", ehr), ("as", authority)):
        (tmp_path / f"{name}.json").write_text(json.dumps({"keys": [signer.public]}))
    running = started(
        ADDRESS="http://127.0.0.1:{port}",
        CDS_CLIENTS=json.dumps({"https://ehr.example": [str(tmp_path / "ehr.json")]}),
        AUTHORITY="https://login.example",
        AUTHORITY_KEYS=str(tmp_path / "as.json"),
        AUTHORITY_TOKENS="https://login.example/token",
        ADMIN_TOKEN=hashlib.sha256(ADMIN.encode()).hexdigest(),
        MAX_BODY="262144",
        HEADER_SECONDS="2",
        AT_ONCE="1000",  # all of these come from one address
        LOG_LEVEL="debug",
    )
    found = Service(running, ehr, authority)
    yield found
    found.client.close()


def answer_of(connection: socket.socket) -> bytes:
    """Everything until the other side closes, or waits for more."""
    parts = b""
    connection.settimeout(10)
    try:
        while part := connection.recv(65536):
            parts += part
            if b"\r\n\r\n" in parts and b"OperationOutcome" in parts:
                break
    except (TimeoutError, ConnectionResetError):
        pass
    return parts


def test_slow_clients_keep_nobody_waiting(service: Service, root: Path) -> None:
    """Heads and bodies that drip (slowloris), from many connections at once; others are served meanwhile."""
    text = (root / "examples/ehr/fernwood-exam.json").read_bytes()
    token = service.access()
    head = f"POST {WHERE} HTTP/1.1\r\nHost: 127.0.0.1:{service.running.port}\r\n"
    with ExitStack() as stack:
        heads = [stack.enter_context(service.connect()) for _ in range(SLOW)]
        strangers = [stack.enter_context(service.connect()) for _ in range(SLOW)]
        for connection in heads:
            connection.sendall(head.encode())
        for connection in strangers:
            connection.sendall(
                f"{head}Content-Type: application/json\r\nContent-Length: 9999\r\n\r\n{{".encode()
            )
        for _ in range(3):
            sent = {**token, "Content-Type": "application/json"}
            assert service.client.post(WHERE, content=text, headers=sent).status_code == 200
            assert service.client.get("/health").status_code == 200
            for connection in heads:
                connection.sendall(b"X-Drip: 1\r\n")
        # without a token nobody waits for a body; a head that does not end is not waited for
        told = Counter(answer_of(connection)[9:12] for connection in strangers)
        assert set(told) <= {b"401", b"429"}, told
        assert Counter(answer_of(connection)[9:12] for connection in heads) == {b"408": SLOW}
    assert service.client.get("/health").status_code == 200


def test_large_bodies_are_refused_before_they_are_read(service: Service) -> None:
    header = service.access()["Authorization"]
    head = (f"POST {WHERE} HTTP/1.1\r\nHost: 127.0.0.1:{service.running.port}\r\n"
            f"Authorization: {header}\r\nContent-Type: application/json\r\n")  # fmt: skip
    with service.connect() as connection:
        connection.sendall(f"{head}Content-Length: 10000000000\r\n\r\n[".encode())
        assert b" 413 " in answer_of(connection)
    with service.connect() as connection:
        connection.sendall(f"{head}Transfer-Encoding: chunked\r\n\r\n".encode())
        sent = 0
        try:
            while sent < 64 * 1024 * 1024:
                connection.sendall(b"10000\r\n" + b" " * 65536 + b"\r\n")
                sent += 65536
        except (BrokenPipeError, ConnectionResetError):
            pass
        assert sent < 32 * 1024 * 1024, "it was told to stop, and the connection was closed"
    deep = b"[" * 200_000
    for content in (deep, b'{"a":' * 50_000, b'{"a": "' + b"x" * 300_000 + b'"}'):
        sent_headers = {"Authorization": header, "Content-Type": "application/json"}
        answer = service.client.post(WHERE, content=content, headers=sent_headers)
        assert answer.status_code in (400, 413)
        assert answer.headers["content-type"] == "application/fhir+json"
    assert service.client.get("/health").status_code == 200


TWO_MEANINGS = [
    b"Content-Length: 5\r\nContent-Length: 6\r\n\r\nhello!",
    b"Content-Length: 4\r\nTransfer-Encoding: chunked\r\n\r\n0\r\n\r\nGET /cds-feedback HTTP/1.1\r\n\r\n",
    b"Content-Length: -1\r\n\r\n",
    b"Content-Length: 1e1\r\n\r\n",
    b"Transfer-Encoding: chunked\r\n\r\nzz\r\n",
    b"Bad Header : x\r\n\r\n",
    b"A: b\x00c\r\n\r\n",
]


def test_requests_of_two_meanings_are_refused(service: Service) -> None:
    """Request smuggling (RFC 9112, section 6.3): the connection has no second request."""
    start = f"POST /exams HTTP/1.1\r\nHost: 127.0.0.1:{service.running.port}\r\n".encode()
    for lines in TWO_MEANINGS:
        with service.connect() as connection:
            connection.sendall(start + lines)
            answer = answer_of(connection)
        assert answer.split(b"\r\n")[0].split(b" ")[1] in (b"400", b"401"), lines
        assert answer.count(b"HTTP/1.1 ") == 1, lines


def test_after_everything_the_log_holds_no_token_and_no_patient(service: Service, root: Path) -> None:
    """Good and bad calls at every kind of address, with tokens and data everywhere they might be put."""
    record = json.loads((root / "examples/ehr/fernwood-exam.json").read_text("utf-8"))
    client, feedback = service.client, {"feedback": [{"card": "x", "userComment": "Fernwood says F-20417"}]}
    patient = {"patient:identifier": "https://x|F-20417"}
    assert client.post(WHERE, json=record, headers=service.access()).status_code == 200
    assert client.post(WHERE, json=record, headers=service.access("system/*.r")).status_code == 403
    assert client.post(WHERE, json=record, headers=service.access(exp=1)).status_code == 401
    assert client.get("/fhir/r4/Observation", params=patient, headers=service.access()).status_code == 200
    client.get("/fhir/r4/Observation/F-20417", headers=service.access())
    client.put("/fhir/r4/Observation/F-20417", json={"id": "F-20417"}, headers=service.access())
    client.post("/fhir/r4", json={"resourceType": "Bundle", "type": "F-20417"}, headers=service.access())
    for path in ("/cds-services", "/cds-services/exam-review-patient-view"):
        client.request("GET" if path.endswith("s") else "POST", path, headers=service.own(path))
        client.get(path, headers=service.own(path, aud="https://F-20417.example"))
        client.get(path, headers=service.own(path, iss="https://F-20417.example", jti="F-20417"))
    path = "/cds-services/exam-review-patient-view/feedback"
    client.post(path, json=feedback, headers=service.own(path))
    client.get("/cds-feedback", headers={"Authorization": f"Bearer {ADMIN}"})
    client.get("/cds-feedback", headers={"Authorization": "Bearer F-20417"})
    client.get(f"/F-20417?access_token={service.tokens[1]}", headers={"Referer": f"{service.home}/F-20417"})
    client.post("/sign-in", data={"token": ADMIN})
    client.get(
        "/maps", headers={"Cookie": f"__Host-fhirgallop={service.tokens[1]}", "Host": "F-20417.example"}
    )
    client.get(
        "/health", headers={"X-Request-Id": "F-20417", "User-Agent": "F-20417", "Origin": "https://F-20417"}
    )
    cookies = [cookie.value or "" for cookie in client.cookies.jar]
    service.running.end()
    log = service.running.log()
    assert log.count("GET /cds-services") >= 3, "there is a log"
    for secret in ("F-20417", "E-2026-0314-07", "V-8812", "Fernwood says", "Bearer", *cookies):
        assert not secret or secret not in log, secret
    for token in service.tokens:
        for part in token.split("."):
            assert part not in log
    assert "caller=system" in log
    for broken in ("Traceback", "Exception in", "[error"):
        assert broken not in log, log
