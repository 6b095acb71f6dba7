"""Signers of tokens, places that publish keys, and services with authorisation on."""

from __future__ import annotations

import base64
import json
import os
import signal
import socket
import subprocess
import sys
import threading
import time
import uuid
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer
from pathlib import Path
from typing import Any

import pytest
from cryptography.hazmat.primitives import hashes
from cryptography.hazmat.primitives.asymmetric import ec, padding, utils
from joserfc.jwk import ECKey, RSAKey
from starlette.testclient import TestClient

from fhirgallop import settings
from fhirgallop.service.app import create_app

HOME = "http://localhost:8470"
EHR = "https://ehr.example"
AUTHORITY = "https://login.example"


@dataclass(frozen=True)
class Signer:
    """A private key with its name and algorithm: signs by hand (RFC 7515, RFC 7518)."""

    kid: str
    alg: str
    key: ECKey | RSAKey

    @property
    def public(self) -> dict[str, Any]:
        """The public half, as it is published."""
        return {**self.key.as_dict(private=False), "kid": self.kid, "use": "sig", "alg": self.alg}

    def sign(self, claims: dict[str, Any], **header: Any) -> str:
        """A token; what is None in the header is left out."""
        whole = {"alg": self.alg, "kid": self.kid, "typ": "JWT", **header}
        whole = {name: value for name, value in whole.items() if value is not None}
        text = f"{part(whole)}.{part(claims)}"
        return f"{text}.{base64_of(self._signature(text.encode()))}"

    def _signature(self, text: bytes) -> bytes:
        size = int(self.alg[2:])
        digest = {256: hashes.SHA256(), 384: hashes.SHA384()}[size]
        if isinstance(self.key, RSAKey):
            return self.key.private_key.sign(text, padding.PKCS1v15(), digest)
        pair = utils.decode_dss_signature(self.key.private_key.sign(text, ec.ECDSA(digest)))
        return b"".join(number.to_bytes(size // 8, "big") for number in pair)


def part(value: Any) -> str:
    return base64_of(json.dumps(value).encode())


def base64_of(raw: bytes) -> str:
    return base64.urlsafe_b64encode(raw).decode().rstrip("=")


def make_signer(kid: str = "k1", alg: str = "ES384") -> Signer:
    """A new signer."""
    curve = {"ES256": "P-256", "ES384": "P-384"}.get(alg)
    key = ECKey.generate_key(curve) if curve else RSAKey.generate_key(2048)
    return Signer(kid, alg, key)


@pytest.fixture(scope="session")
def new_signer() -> Callable[..., Signer]:
    return make_signer


@pytest.fixture(scope="session")
def ehr() -> Signer:
    """The key of the CDS client."""
    return make_signer("ehr-1", "ES384")


@pytest.fixture(scope="session")
def authority() -> Signer:
    """The key of the authorisation server."""
    return make_signer("as-1", "RS384")


@dataclass
class Place:
    """An address on this machine that publishes what it is told to, and counts who asks."""

    base: str
    pages: dict[str, tuple[int, dict[str, str], bytes]] = field(default_factory=dict)
    asked: list[str] = field(default_factory=list)

    def publish(self, path: str, *signers: Signer, **headers: str) -> str:
        """A key set at a path; gives its address."""
        text = json.dumps({"keys": [signer.public for signer in signers]}).encode()
        named = {name.replace("_", "-"): value for name, value in headers.items()}
        self.pages[path] = (200, {"Content-Type": "application/json", **named}, text)
        return self.base + path


@pytest.fixture
def place() -> Iterator[Place]:
    """Where keys are published."""

    class Handler(BaseHTTPRequestHandler):
        def do_GET(self) -> None:
            found.asked.append(self.path)
            status, headers, text = found.pages.get(self.path, (404, {}, b""))
            self.send_response(status)
            for name, value in headers.items():
                self.send_header(name, value)
            self.send_header("Content-Length", str(len(text)))
            self.end_headers()
            self.wfile.write(text)

        def do_POST(self) -> None:
            self.rfile.read(int(self.headers["Content-Length"]))
            self.do_GET()

        def log_message(self, *_: Any) -> None:
            pass

    server = ThreadingHTTPServer(("127.0.0.1", 0), Handler)
    found = Place(f"http://127.0.0.1:{server.server_address[1]}")
    thread = threading.Thread(target=server.serve_forever, kwargs={"poll_interval": 0.02}, daemon=True)
    thread.start()
    yield found
    server.shutdown()
    server.server_close()
    thread.join()


@pytest.fixture
def serving(tmp_path: Path, root: Path) -> Iterator[Callable[..., TestClient]]:
    """Services with settings of choice: `serving(cds_clients=..., authority=...)`."""
    opened: list[TestClient] = []

    def make(**given: Any) -> TestClient:
        chosen = settings.load(
            maps=root / "examples/informatician",
            database=f"sqlite:///{tmp_path / 'security.sqlite3'}",
            **{"address": HOME, "loopback_http": True, **given},
        )
        speaking = TestClient(create_app(chosen), base_url=HOME, raise_server_exceptions=False)
        opened.append(speaking.__enter__())
        return speaking

    yield make
    for one in opened:
        one.__exit__(None, None, None)


@pytest.fixture
def cds_service(serving: Callable[..., TestClient], place: Place, ehr: Signer) -> TestClient:
    """A service with one CDS client, whose keys stand at the place."""
    return serving(cds_clients={EHR: [place.publish("/ehr.json", ehr)]})


@pytest.fixture
def fhir_service(serving: Callable[..., TestClient], place: Place, authority: Signer) -> TestClient:
    """A service with an authorisation server whose tokens are JWTs."""
    return serving(**authority_settings(place, authority))


def authority_settings(place: Place, authority: Signer) -> dict[str, Any]:
    return {
        "authority": AUTHORITY,
        "authority_keys": place.publish("/as.json", authority),
        "authority_tokens": f"{AUTHORITY}/token",
    }


@pytest.fixture(scope="session")
def authority_of() -> Callable[[Place, Signer], dict[str, Any]]:
    return authority_settings


@pytest.fixture
def cds_claims() -> Callable[..., dict[str, Any]]:
    """Claims of a good CDS token: `cds_claims("/cds-services", exp=...)`; None leaves one out."""

    def make(path: str = "/cds-services", **changed: Any) -> dict[str, Any]:
        now = int(time.time())
        claims = {
            "iss": EHR, "aud": HOME + path, "iat": now, "exp": now + 120, "jti": str(uuid.uuid4()), **changed,
        }  # fmt: skip
        return {name: value for name, value in claims.items() if value is not None}

    return make


@pytest.fixture
def access_claims() -> Callable[..., dict[str, Any]]:
    """Claims of a good access token."""

    def make(scope: str = "system/*.cruds", **changed: Any) -> dict[str, Any]:
        now = int(time.time())
        claims = {
            "iss": AUTHORITY, "aud": f"{HOME}/fhir/r4", "iat": now, "exp": now + 120, "client_id": "sender",
            "jti": str(uuid.uuid4()), "scope": scope, **changed,
        }  # fmt: skip
        return {name: value for name, value in claims.items() if value is not None}

    return make


@pytest.fixture(scope="session")
def bearer() -> Callable[[str], dict[str, bytes]]:
    """The header that presents a token."""
    return lambda token: {"Authorization": f"Bearer {token}".encode()}


@pytest.fixture(scope="session")
def outcome() -> Callable[[Any], tuple[int, str, str]]:
    """Status, issue code and rule of an error answer, which has to be an OperationOutcome."""

    def read(answer: Any) -> tuple[int, str, str]:
        assert answer.headers["content-type"] == "application/fhir+json"
        (issue,) = answer.json()["issue"]
        return answer.status_code, issue["code"], issue["details"]["coding"][0]["code"]

    return read


class Running:
    """The service as a process of its own, started from the command line."""

    def __init__(self, root: Path, folder: Path, env: dict[str, str]) -> None:
        with socket.socket() as taken:
            taken.bind(("127.0.0.1", 0))
            self.port: int = taken.getsockname()[1]
        named = {f"FHIRGALLOP_{name}": value.replace("{port}", str(self.port)) for name, value in env.items()}
        words = ["--port", str(self.port), "--maps", str(root / "examples/informatician"),
                 "--database", f"sqlite:///{folder / f'{self.port}.sqlite3'}"]  # fmt: skip
        self.log_file = folder / f"{self.port}.log"
        with self.log_file.open("wb") as log:
            self.process = subprocess.Popen(
                [sys.executable, "-m", "fhirgallop", "serve", *words],
                stdout=log, stderr=subprocess.STDOUT, env={**os.environ, **named},
            )  # fmt: skip
        for _ in range(600):
            if "running on" in self.log().lower():
                return
            assert self.process.poll() is None, self.log()
            time.sleep(0.1)
        raise AssertionError(self.log())

    def log(self) -> str:
        return self.log_file.read_text("utf-8")

    def end(self) -> None:
        self.process.send_signal(signal.SIGTERM)
        self.process.wait(timeout=60)


@pytest.fixture
def started(tmp_path: Path, root: Path) -> Iterator[Callable[..., Running]]:
    """Starts the service: `started(ADMIN_TOKEN=...)`; `{port}` stands for its port."""
    running: list[Running] = []

    def start(**env: str) -> Running:
        running.append(Running(root, tmp_path, env))
        return running[-1]

    yield start
    for one in running:
        one.end()
