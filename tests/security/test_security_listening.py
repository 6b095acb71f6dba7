"""Where the service listens: other machines only with authorisation and TLS; every refusal says the cure."""

from __future__ import annotations

import hashlib
import json
import socket
import ssl
from collections.abc import Callable
from datetime import UTC, datetime, timedelta
from ipaddress import ip_address
from pathlib import Path
from typing import Any

import httpx
import pytest
from cryptography import x509
from cryptography.hazmat.primitives import hashes, serialization
from cryptography.hazmat.primitives.asymmetric import ec
from cryptography.x509.oid import NameOID

from fhirgallop import settings
from fhirgallop.errors import SettingsError

TOKEN = "a token of the administrators 0123456789"
ADMIN = hashlib.sha256(TOKEN.encode()).hexdigest()
OUT = {"host": "0.0.0.0", "names": ["gallop.example"], "address": "https://gallop.example"}
AS = {"authority": "https://login.example", "authority_tokens": "https://login.example/token"}
HERE = {"address": "http://localhost:8470"}


@pytest.mark.parametrize(
    ("given", "cures"),
    [
        ({"host": "0.0.0.0"}, ["without authorisation", "ADMIN_TOKEN", "without TLS", "BEHIND_PROXY"]),
        ({**OUT, "admin_token": ADMIN}, ["without TLS", "CERTIFICATE_KEY"]),
        ({**OUT, "behind_proxy": True}, ["without authorisation"]),
        ({"behind_proxy": True}, ["without authorisation"]),
        ({"certificate": "c.pem"}, ["CERTIFICATE_KEY", "give both"]),
        ({"proxies": ["*"]}, ["PROXIES"]),
        ({"proxies": ["0.0.0.0/0"]}, ["PROXIES"]),
        ({"proxies": ["::/0"]}, ["PROXIES"]),
        ({"behind_proxy": True, "proxies": [], "admin_token": ADMIN, **HERE}, ["PROXIES: name"]),
        ({"admin_token": ADMIN}, ["ADDRESS: with authorisation"]),
        ({"admin_token": ADMIN, "address": "http://gallop.example"}, ["ADDRESS: write https"]),
        ({"admin_token": ADMIN, "address": "https://gallop.example?x"}, ["ADDRESS"]),
        ({"admin_token": ADMIN, "address": "https://user@localhost"}, ["ADDRESS"]),
        ({"admin_token": ADMIN, "address": "https://gallop.example"}, ["ADDRESS: its host", "NAMES"]),
        ({"admin_token": "secret"}, ["ADMIN_TOKEN"]),
        ({**HERE, "cds_clients": {"https://ehr.example": []}}, ["CDS_CLIENTS"]),
        ({**HERE, "cds_clients": {"https://ehr.example": ["http://ehr.example/k"]}}, ["https://host"]),
        ({**HERE, "cds_clients": {"x": ["http://127.0.0.1/k"]}}, ["CDS_CLIENTS", "LOOPBACK_HTTP"]),
        ({**HERE, "cds_clients": {"x": ["ftp://ehr.example/k"]}}, ["CDS_CLIENTS"]),
        ({**HERE, "cds_clients": {"x": ["http://[::1"]}}, ["CDS_CLIENTS"]),
        ({**HERE, **AS}, ["AUTHORITY_KEYS", "AUTHORITY_INTROSPECTION"]),
        ({**HERE, "authority": "https://login.example"}, ["AUTHORITY_TOKENS"]),
        ({**HERE, **AS, "authority_introspection": "https://x.example/i"}, ["AUTHORITY_SECRET"]),
        ({**HERE, **AS, "authority_keys": "http://x.example/k"}, ["AUTHORITY_KEYS"]),
        ({"authority_keys": "k.json"}, ["AUTHORITY_KEYS", "means nothing"]),
        ({**HERE, "sign_in": "https://op.example"}, ["SIGN_IN_CLIENT", "SIGN_IN_ROLES"]),
        ({"sign_in_client": "x"}, ["SIGN_IN: name the issuer"]),
        ({**HERE, "sign_in": "http://op.example", "sign_in_client": "x", "sign_in_roles": {"a": "operator"}},
         ["SIGN_IN:"]),
        ({"cors_origins": ["*"]}, ["CORS_ORIGINS"]),
        ({"cors_origins": ["https://ehr.example/"]}, ["CORS_ORIGINS"]),
        ({"cors_origins": ["https://*"]}, ["CORS_ORIGINS"]),
        ({"cors_origins": ["null"]}, ["CORS_ORIGINS"]),
        ({"cds_algorithms": ["none"]}, ["CDS_ALGORITHMS"]),
        ({"cds_token_seconds": 86400}, ["CDS_TOKEN_SECONDS"]),
    ],
)  # fmt: skip
def test_settings_that_are_not_safe(given: dict[str, Any], cures: list[str]) -> None:
    with pytest.raises(SettingsError) as refused:
        settings.load(**given)
    for cure in cures:
        assert cure in str(refused.value)


@pytest.mark.parametrize(
    "given",
    [
        {**OUT, "admin_token": ADMIN, "certificate": "c.pem", "certificate_key": "k.pem"},
        {**OUT, "admin_token": ADMIN, "behind_proxy": True, "proxies": ["10.0.0.7", "10.1.0.0/16"]},
        {**HERE, **AS, "authority_keys": "keys.json"},
        {**HERE, "loopback_http": True, "cds_clients": {"x": ["http://127.0.0.1:9/k", "keys.json"]}},
        {"cors_origins": ["https://ehr.example", "http://localhost:3000", "https://[::1]:8443"]},
        {},
    ],
)
def test_settings_that_are(given: dict[str, Any]) -> None:
    chosen = settings.load(**given)
    assert chosen.authorised == bool({"admin_token", "authority", "cds_clients"} & set(given))


@pytest.mark.parametrize(
    "given",
    [{"cds_clients": {"x": ["{tmp}/none.json"]}}, {"cds_clients": {"x": ["{tmp}/odd.json"]}},
     {"cds_clients": {"x": ["https://user@ehr.example/k"]}},
     {**AS, "authority_keys": "{tmp}/odd.json"},
     {**AS, "authority_introspection": "https://x.example/i", "authority_client": "x",
      "authority_secret": "{tmp}/empty"},
     {**AS, "authority_introspection": "https://x.example/i", "authority_client": "x",
      "authority_secret": "{tmp}/none"}],
)  # fmt: skip
def test_files_that_cannot_be_used_are_told_at_the_start(serving: Any, tmp_path: Path, given: Any) -> None:
    (tmp_path / "odd.json").write_text("{}")
    (tmp_path / "empty").write_text("\n")
    with pytest.raises(SettingsError):
        serving(**json.loads(json.dumps(given).replace("{tmp}", str(tmp_path))))


def certificate(folder: Path) -> tuple[Path, Path]:
    """A certificate for this machine, signed by itself, and its key."""
    key = ec.generate_private_key(ec.SECP256R1())
    name = x509.Name([x509.NameAttribute(NameOID.COMMON_NAME, "localhost")])
    now = datetime.now(tz=UTC)
    names = [x509.DNSName("localhost"), x509.IPAddress(ip_address("127.0.0.1"))]
    made = (
        x509.CertificateBuilder()
        .subject_name(name)
        .issuer_name(name)
        .public_key(key.public_key())
        .serial_number(x509.random_serial_number())
        .not_valid_before(now - timedelta(minutes=1))
        .not_valid_after(now + timedelta(days=1))
        .add_extension(x509.SubjectAlternativeName(names), critical=False)
        .sign(key, hashes.SHA256())
    )
    chain, private = folder / "certificate.pem", folder / "key.pem"
    chain.write_bytes(made.public_bytes(serialization.Encoding.PEM))
    private.write_bytes(
        key.private_bytes(
            serialization.Encoding.PEM, serialization.PrivateFormat.PKCS8, serialization.NoEncryption()
        )
    )
    return chain, private


def test_tls_of_its_own(started: Callable[..., Any], tmp_path: Path) -> None:
    """All addresses, authorisation and TLS: version 1.2 and 1.3 are spoken, 1.1 and plain http are not."""
    chain, private = certificate(tmp_path)
    port: int = started(
        HOST="0.0.0.0", ADMIN_TOKEN=ADMIN, ADDRESS="https://localhost:{port}",
        CERTIFICATE=str(chain), CERTIFICATE_KEY=str(private),
    ).port  # fmt: skip
    for version in (ssl.TLSVersion.TLSv1_2, ssl.TLSVersion.TLSv1_3):
        trusted = ssl.create_default_context(cafile=chain)
        trusted.minimum_version = trusted.maximum_version = version
        with httpx.Client(base_url=f"https://localhost:{port}", verify=trusted, trust_env=False) as client:
            answer = client.get("/health")
            assert answer.status_code == 200
            assert answer.headers["strict-transport-security"].startswith("max-age=")
            assert client.get("/cds-feedback").status_code == 401
            opened = client.get("/cds-feedback", headers={"Authorization": f"Bearer {TOKEN}"})
            assert opened.status_code == 200
    # a handshake record (22) is an answer, anything else none: RFC 5246, section 6.2.1
    assert first_byte(port, client_hello(b"\x03\x03")) == b"\x16"
    assert first_byte(port, client_hello(b"\x03\x02")) != b"\x16"
    with pytest.raises(httpx.HTTPError), httpx.Client(trust_env=False) as plain:
        plain.get(f"http://127.0.0.1:{port}/health")


def client_hello(version: bytes) -> bytes:
    """A ClientHello of TLS 1.2 (3, 3) or 1.1 (3, 2) at most, by hand (RFC 5246, section 7.4.1.2)."""
    suites = bytes.fromhex("c02bc009c00a")
    groups = bytes.fromhex("000a00040002001700" + "0d00060004" + "04030203")
    hello = version + bytes(32) + b"\x00" + len(suites).to_bytes(2, "big") + suites + b"\x01\x00"
    hello += len(groups).to_bytes(2, "big") + groups
    message = b"\x01" + len(hello).to_bytes(3, "big") + hello
    return b"\x16\x03\x01" + len(message).to_bytes(2, "big") + message


def first_byte(port: int, sent: bytes) -> bytes:
    with socket.create_connection(("127.0.0.1", port), timeout=10) as connection:
        connection.sendall(sent)
        return connection.recv(1)


def test_behind_a_proxy_only_the_proxy_is_believed(started: Callable[..., Any]) -> None:
    """The address that a proxy names is the one that is slowed down; a stranger's word counts nothing."""
    given = {"ADMIN_TOKEN": ADMIN, "ADDRESS": "http://localhost:{port}", "BEHIND_PROXY": "true"}

    def guess(port: int, forwarded: str, token: str = "wrong") -> int:
        headers = {"Authorization": f"Bearer {token}", "X-Forwarded-For": forwarded}
        where = f"http://127.0.0.1:{port}/cds-feedback"
        return httpx.get(where, headers=headers, trust_env=False).status_code

    port = started(**given).port
    assert [guess(port, "203.0.113.7") for _ in range(11)] == [401] * 10 + [429]
    assert guess(port, "203.0.113.8", TOKEN) == 200
    other = started(**given, PROXIES='["10.0.0.7"]').port
    assert [guess(other, f"203.0.113.{n}") for n in range(11)] == [401] * 10 + [429]
