"""A CDS Hooks client of a test site, as a process of its own: it signs every call with keys that it made.

    python cds_client.py

prints the address of its key set, on 127.0.0.1, and then reads one call a line from its input, in JSON:

    method, path, body    what to send to the service
    service               base address of the service; taken from the first line that has it
    sign                  "new" (as it should be), "none", "again" (the last good token for that path),
                          "other" (with a key that was never published), or "rotated" (makes and publishes a
                          new key first)
    aud                   instead of the address that is called

For each it prints {"status", "headers", "body"} on one line. Source: CDS Hooks 2.0.1, "Trusting CDS Clients".
"""

from __future__ import annotations

import json
import sys
import threading
import time
import urllib.error
import urllib.request
import uuid
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer
from typing import Any

from joserfc import jwt
from joserfc.jwk import ECKey

ISSUER = "https://ehr.example/cds"


class Keys:
    """The client's keys: all are published, the last one signs."""

    def __init__(self) -> None:
        self.all: list[ECKey] = []
        self.add()

    def add(self) -> None:
        """One key more."""
        self.all.append(self.made(f"ehr-{len(self.all) + 1}"))

    @staticmethod
    def made(kid: str) -> ECKey:
        """A new key."""
        return ECKey.generate_key("P-384", {"kid": kid, "use": "sig", "alg": "ES384"})


class Client:
    """Sends calls."""

    def __init__(self, keys: Keys, jku: str) -> None:
        self.keys = keys
        self.jku = jku
        self.service = ""
        self.last: dict[str, str] = {}

    def token(self, call: dict[str, Any]) -> str:
        """A token for one call."""
        how = call.get("sign", "new")
        if how == "again":
            return self.last[call["path"]]
        if how == "rotated":
            self.keys.add()
        key = Keys.made(self.keys.all[-1].kid or "") if how == "other" else self.keys.all[-1]
        now = int(time.time())
        claims = {
            "iss": ISSUER, "aud": call.get("aud", self.service + call["path"]), "iat": now, "exp": now + 60,
            "jti": str(uuid.uuid4()), "tenant": "fernwood",
        }  # fmt: skip
        header = {"alg": "ES384", "kid": key.kid, "typ": "JWT", "jku": self.jku}
        token = jwt.encode(header, claims, key, algorithms=["ES384"])
        if how in ("new", "rotated") and "aud" not in call:
            self.last[call["path"]] = token
        return token

    def send(self, call: dict[str, Any]) -> dict[str, Any]:
        """One call, and its answer."""
        self.service = call.get("service", self.service)
        headers = {"Accept": "application/json"}
        if call.get("sign") != "none":
            headers["Authorization"] = f"Bearer {self.token(call)}"
        body = None
        if "body" in call:
            body = json.dumps(call["body"]).encode()
            headers["Content-Type"] = "application/json"
        asked = urllib.request.Request(self.service + call["path"], body, headers, method=call["method"])
        opener = urllib.request.build_opener(urllib.request.ProxyHandler({}))
        try:
            with opener.open(asked, timeout=30) as answer:
                return told(answer.status, answer.headers, answer.read())
        except urllib.error.HTTPError as error:
            with error:
                return told(error.code, error.headers, error.read())


def told(status: int, headers: Any, body: bytes) -> dict[str, Any]:
    """An answer as one line says it."""
    found = {name.lower(): value for name, value in headers.items()}
    return {"status": status, "headers": found, "body": json.loads(body) if body else None}


def main() -> None:
    """Publishes keys and sends calls until its input ends."""
    keys = Keys()

    class Published(BaseHTTPRequestHandler):
        def do_GET(self) -> None:
            text = json.dumps({"keys": [key.as_dict(private=False) for key in keys.all]}).encode()
            self.send_response(200)
            self.send_header("Content-Type", "application/json")
            self.send_header("Cache-Control", "max-age=600")
            self.send_header("Content-Length", str(len(text)))
            self.end_headers()
            self.wfile.write(text)

        def log_message(self, *_: Any) -> None:
            pass

    server = ThreadingHTTPServer(("127.0.0.1", 0), Published)
    threading.Thread(target=server.serve_forever, daemon=True).start()
    jku = f"http://127.0.0.1:{server.server_address[1]}/.well-known/jwks.json"
    sys.stdout.write(jku + "\n")
    sys.stdout.flush()
    client = Client(keys, jku)
    for line in sys.stdin:
        sys.stdout.write(json.dumps(client.send(json.loads(line))) + "\n")
        sys.stdout.flush()
    server.shutdown()


if __name__ == "__main__":
    main()
