"""Our client assertion, checked without the library that made it.

Sources: RFC 7515 (compact form: three parts in base64url without padding), RFC 7518 section 3.3 (RS384 is
RSASSA-PKCS1-v1_5 with SHA-384) and 3.4 (ES384: R and S of 48 octets each, on P-384 with SHA-384), RFC 7638
(thumbprint: SHA-256 over the required members in lexical order), RFC 7523 section 2.2 (form of the request).
"""

from __future__ import annotations

import base64
import hashlib
import json
from datetime import UTC, datetime
from pathlib import Path
from typing import Any
from urllib.parse import parse_qs

import pytest
from cryptography.hazmat.primitives.asymmetric import ec, padding, rsa
from cryptography.hazmat.primitives.asymmetric.utils import encode_dss_signature
from cryptography.hazmat.primitives.hashes import SHA384
from cryptography.hazmat.primitives.serialization import Encoding, NoEncryption, PrivateFormat

from fhirgallop.delivery.auth import Access, Identity
from fhirgallop.delivery.client import Answer
from fhirgallop.delivery.destination import Destination
from fhirgallop.delivery.keys import public_set, read_keys

URL = "https://login.record.example/token"


class Wire:
    """Takes the token request and gives a token."""

    form: dict[str, list[str]]

    def send(self, _method: str, _url: str, *, body: bytes, **_: Any) -> Answer:
        self.form = parse_qs(body.decode("ascii"), strict_parsing=True)
        return Answer(200, {}, b'{"access_token":"t","token_type":"bearer","expires_in":300}')


def unpacked(part: str) -> bytes:
    assert "=" not in part
    return base64.urlsafe_b64decode(part + "=" * (-len(part) % 4))


@pytest.mark.parametrize("alg", ["RS384", "ES384"])
def test_the_assertion_verifies_and_its_key_is_published(tmp_path: Path, alg: str) -> None:
    private = (
        rsa.generate_private_key(65537, 2048) if alg == "RS384" else ec.generate_private_key(ec.SECP384R1())
    )
    path = tmp_path / "key.pem"
    path.write_bytes(private.private_bytes(Encoding.PEM, PrivateFormat.PKCS8, NoEncryption()))
    keys, wire = read_keys(path), Wire()
    access = Access(
        wire,  # type: ignore[arg-type]
        Destination("https://record.example/fhir", URL),
        Identity("gallop-1", keys[0], "system/Observation.cus"),
        clock=lambda: datetime(2026, 12, 1, 8, 0, tzinfo=UTC),
        new_id=lambda: "jti-0",
    )
    access.token()
    head, body, signature = wire.form["client_assertion"][0].split(".")
    signed = f"{head}.{body}".encode("ascii")
    public = private.public_key()
    if isinstance(public, rsa.RSAPublicKey):
        public.verify(unpacked(signature), signed, padding.PKCS1v15(), SHA384())
    else:
        raw = unpacked(signature)
        assert len(raw) == 96
        numbers = (int.from_bytes(raw[:48], "big"), int.from_bytes(raw[48:], "big"))
        public.verify(encode_dss_signature(*numbers), signed, ec.ECDSA(SHA384()))
    header = json.loads(unpacked(head))
    (published,) = json.loads(public_set(keys))["keys"]
    assert (header["alg"], header["kid"]) == (alg, published["kid"])
    needed = ("e", "kty", "n") if alg == "RS384" else ("crv", "kty", "x", "y")
    members = json.dumps({name: published[name] for name in needed}, separators=(",", ":"), sort_keys=True)
    thumbprint = base64.urlsafe_b64encode(hashlib.sha256(members.encode()).digest()).rstrip(b"=")
    assert published["kid"] == thumbprint.decode()
