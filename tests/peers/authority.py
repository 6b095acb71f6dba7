"""An authorisation server and OpenID Connect provider of a test site, as a process of its own.

    python authority.py

prints its address and then serves until it is ended: discovery, keys, an authorization address that asks
nobody (the person is whoever `POST /behave` says), codes bound to a PKCE challenge, access tokens for client
credentials, introspection. `POST /behave` takes JSON: `claims` overrides claims of the next id tokens (null
takes one out), `person` names who signs in, `deny` refuses. It checks what a provider must check of a client
(RFC 6749, RFC 7636) and answers 400 where that is wrong, so that a client that skips a step fails here.
"""

from __future__ import annotations

import base64
import hashlib
import json
import secrets
import sys
import time
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer
from typing import Any, ClassVar
from urllib.parse import parse_qs, urlencode, urlsplit

from joserfc import jwt
from joserfc.jwk import RSAKey

CLIENT, SECRET = "gallop", "s3cret/with:signs"
KEY = RSAKey.generate_key(2048, {"kid": "op-1", "use": "sig", "alg": "RS256"})


class Authority(BaseHTTPRequestHandler):
    """One request."""

    protocol_version = "HTTP/1.1"
    codes: ClassVar[dict[str, dict[str, str]]] = {}
    tokens: ClassVar[dict[str, dict[str, Any]]] = {}
    behaviour: ClassVar[dict[str, Any]] = {}

    @property
    def home(self) -> str:
        """Issuer identifier and base address."""
        return f"http://127.0.0.1:{self.server.server_address[1]}"

    def do_GET(self) -> None:
        """Discovery, keys, and the authorization address."""
        parts = urlsplit(self.path)
        asked = {name: values[0] for name, values in parse_qs(parts.query).items()}
        if parts.path == "/.well-known/openid-configuration":
            paths = {"authorization_endpoint": "authorize", "token_endpoint": "token", "jwks_uri": "keys"}
            found = {name: f"{self.home}/{path}" for name, path in paths.items()}
            self.say(200, {"issuer": self.home, **found, **self.behaviour.get("discovery", {})})
        elif parts.path == "/keys":
            self.say(200, {"keys": [KEY.as_dict(private=False)]})
        elif parts.path == "/authorize":
            self.authorize(asked)
        else:
            self.say(404, {})

    def authorize(self, asked: dict[str, str]) -> None:
        """Sends the browser back with a code."""
        needed = {"response_type": "code", "client_id": CLIENT, "code_challenge_method": "S256"}
        wrong = [name for name, value in needed.items() if asked.get(name) != value]
        wrong += [
            name for name in ("state", "nonce", "code_challenge", "redirect_uri") if not asked.get(name)
        ]
        if wrong or "openid" not in asked.get("scope", ""):
            self.say(400, {"error": "invalid_request", "wrong": wrong})
            return
        if self.behaviour.get("deny"):
            back = {"error": "access_denied", "state": asked["state"]}
        else:
            code = secrets.token_urlsafe()
            self.codes[code] = asked
            back = {"code": code, "state": asked["state"], "iss": self.home}
        self.send_response(302)
        self.send_header("Location", f"{asked['redirect_uri']}?{urlencode(back)}")
        self.send_header("Content-Length", "0")
        self.end_headers()

    def do_POST(self) -> None:
        """Tokens, introspection, and how to behave."""
        body = self.rfile.read(int(self.headers["Content-Length"])).decode()
        if self.path == "/behave":
            type(self).behaviour = json.loads(body)
            self.say(200, {})
            return
        form = {name: values[0] for name, values in parse_qs(body).items()}
        # both halves are form-encoded before they are joined (RFC 6749, section 2.3.1)
        pair = f"{CLIENT}:{SECRET.replace('/', '%2F').replace(':', '%3A')}"
        if self.headers["Authorization"] != f"Basic {base64.b64encode(pair.encode()).decode()}":
            self.say(401, {"error": "invalid_client"})
        elif self.path == "/token" and form.get("grant_type") == "authorization_code":
            self.exchange(form)
        elif self.path == "/token" and form.get("grant_type") == "client_credentials":
            token = secrets.token_urlsafe()
            now = int(time.time())
            self.tokens[token] = {
                "active": True, "scope": form["scope"], "client_id": CLIENT, "exp": now + 300,
                "aud": form["audience"],
            }  # fmt: skip
            told = {"access_token": token, "token_type": "bearer", "expires_in": 300, "scope": form["scope"]}
            self.say(200, told)
        elif self.path == "/introspect":
            self.say(200, self.tokens.get(form.get("token", ""), {"active": False}))
        else:
            self.say(400, {"error": "unsupported_grant_type"})

    def exchange(self, form: dict[str, str]) -> None:
        """An id token for a code that was given to this browser and client, once."""
        asked = self.codes.pop(form.get("code", ""), None)
        proof = hashlib.sha256(form.get("code_verifier", "").encode()).digest()
        challenge = base64.urlsafe_b64encode(proof).decode().rstrip("=")
        bound = asked and (asked["code_challenge"], asked["redirect_uri"])
        if bound != (challenge, form.get("redirect_uri")) or not 43 <= len(form["code_verifier"]) <= 128:
            self.say(400, {"error": "invalid_grant"})
            return
        assert asked
        now = int(time.time())
        claims = {
            "iss": self.home, "aud": CLIENT, "sub": "p-1", "iat": now, "exp": now + 300,
            "nonce": asked["nonce"], "roles": ["cardiology-it"], **self.behaviour.get("claims", {}),
        }  # fmt: skip
        claims = {name: value for name, value in claims.items() if value is not None}
        key = RSAKey.generate_key(2048, {"kid": "op-1"}) if self.behaviour.get("forge") else KEY
        token = jwt.encode({"alg": "RS256", "kid": "op-1"}, claims, key)
        self.say(200, {"id_token": token, "access_token": "unused", "token_type": "Bearer"})

    def say(self, status: int, value: Any) -> None:
        """An answer in JSON."""
        body = json.dumps(value).encode()
        self.send_response(status)
        self.send_header("Content-Type", "application/json")
        self.send_header("Content-Length", str(len(body)))
        self.end_headers()
        self.wfile.write(body)

    def log_message(self, *_: Any) -> None:
        """Says nothing."""


def main() -> None:
    """Serves until ended."""
    server = ThreadingHTTPServer(("127.0.0.1", 0), Authority)
    sys.stdout.write(f"http://127.0.0.1:{server.server_address[1]}\n")
    sys.stdout.flush()
    server.serve_forever()


if __name__ == "__main__":
    main()
