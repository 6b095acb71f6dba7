"""A record system to deliver to: a process of its own that takes FHIR transactions, and can misbehave.

    python receiver.py FILE [--port N] [--faults 0.2] [--seed 7] [--late 1.5] [--keys JWKS --client ID]

Conditional updates and creates are applied exactly (FHIR R4 http.html: `PUT Type?identifier=...` with no
match creates, with one updates, with several is refused with 412; `ifNoneExist` with one match writes
nothing), references by `urn:uuid` are resolved, a transaction is applied whole or not at all. What is kept
survives any death of the process (SQLite, WAL). `events` tells in order what was applied, and whether it
changed anything.

With `--faults` a part of the requests goes wrong, in the order that the seed decides: the connection is
refused or broken before or after the transaction was applied, the answer comes too late or not whole, or it
is 412, 429 with Retry-After, 500, 503, or a page of something else. With `--keys` a token is needed (SMART
backend services): the file holds the client's public keys, `/token` gives tokens for a signed assertion.

The first line printed is the port.
"""

from __future__ import annotations

import argparse
import contextlib
import hashlib
import json
import random
import secrets
import socket
import sqlite3
import struct
import threading
import time
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer
from pathlib import Path
from typing import Any, ClassVar
from urllib.parse import parse_qs

from joserfc import jwt
from joserfc.jwk import KeySet

FHIR = "application/fhir+json"
FAULTS = ("refuse", "break-before", "break-after", "late", "half", "412", "429", "500", "503", "page")
TABLES = """
CREATE TABLE IF NOT EXISTS resources (
    id INTEGER PRIMARY KEY, type TEXT, key TEXT, version INTEGER, body BLOB);
CREATE INDEX IF NOT EXISTS resources_key ON resources (type, key);
CREATE TABLE IF NOT EXISTS events (
    id INTEGER PRIMARY KEY, request TEXT, patient TEXT, exam TEXT, digest TEXT,
    created INTEGER, updated INTEGER, same INTEGER);
CREATE TABLE IF NOT EXISTS seen (id INTEGER PRIMARY KEY, request TEXT, fault TEXT);
"""


class RefusedError(Exception):
    """A transaction that cannot be applied: status, issue code, place."""


class Store:
    """The resources; one transaction at a time."""

    def __init__(self, path: Path) -> None:
        self.lock = threading.Lock()
        self.database = sqlite3.connect(path, isolation_level=None, check_same_thread=False)
        self.database.execute("PRAGMA journal_mode=WAL")
        self.database.executescript(TABLES)

    def note(self, request: str, fault: str) -> int:
        """A request came; its number in the order of arrival, for the plan of faults."""
        with self.lock:
            return (
                self.database.execute(
                    "INSERT INTO seen (request, fault) VALUES (?, ?)", (request, fault)
                ).lastrowid
                or 0
            )

    def apply(self, request: str, text: bytes) -> dict[str, Any]:
        """Applies a transaction Bundle whole, or raises RefusedError and leaves all as it was."""
        bundle = json.loads(text)
        if bundle.get("resourceType") != "Bundle" or bundle.get("type") != "transaction":
            raise RefusedError(400, "invalid", "Bundle.type")
        with self.lock:
            self.database.execute("BEGIN IMMEDIATE")
            try:
                entries = self._apply(request, text, bundle["entry"])
                self.database.execute("COMMIT")
            except BaseException:
                self.database.execute("ROLLBACK")
                raise
        return {"resourceType": "Bundle", "type": "transaction-response", "entry": entries}

    def _apply(self, request: str, text: bytes, entries: list[dict[str, Any]]) -> list[dict[str, Any]]:
        rows = [self._row(entry, number) for number, entry in enumerate(entries)]
        names = {
            entry["fullUrl"]: f"{entry['resource']['resourceType']}/{row}"
            for entry, (row, _) in zip(entries, rows, strict=True)
        }
        counts = {"created": 0, "updated": 0, "same": 0}
        answers = []
        for entry, (row, new) in zip(entries, rows, strict=True):
            body = json.dumps(resolved(entry["resource"], names)).encode()
            version, kept = self.database.execute(
                "SELECT version, body FROM resources WHERE id = ?", (row,)
            ).fetchone()
            update = entry["request"]["method"] == "PUT"
            if new or (update and body != kept):
                version += 1
                self.database.execute(
                    "UPDATE resources SET version = ?, body = ? WHERE id = ?", (version, body, row)
                )
                counts["created" if new else "updated"] += 1
            else:
                counts["same"] += 1
            place = f"{entry['resource']['resourceType']}/{row}/_history/{version}"
            status = "201 Created" if new else "200 OK"
            answers.append({"response": {"status": status, "location": place, "etag": f'W/"{version}"'}})
        report = next(e["resource"] for e in entries if e["resource"]["resourceType"] == "DiagnosticReport")
        self.database.execute(
            "INSERT INTO events (request, patient, exam, digest, created, updated, same)"
            " VALUES (?, ?, ?, ?, ?, ?, ?)",
            (request, report["subject"]["identifier"]["value"], report["identifier"][0]["value"],
             hashlib.sha256(text).hexdigest(), *counts.values()),
        )  # fmt: skip
        return answers

    def _row(self, entry: dict[str, Any], number: int) -> tuple[int, bool]:
        """The row that an entry is about, and whether it is new."""
        request, kind = entry["request"], entry["resource"]["resourceType"]
        if request["method"] == "PUT":
            named, _, key = request["url"].partition("?identifier=")
            held = entry["resource"]["identifier"][0]
            if named != kind or key != f"{held['system']}|{held['value']}":
                raise RefusedError(400, "invalid", f"Bundle.entry[{number}].request.url")
        elif request["method"] == "POST" and request["url"] == kind:
            key = request["ifNoneExist"].removeprefix("_tag=")
        else:
            raise RefusedError(400, "not-supported", f"Bundle.entry[{number}].request.method")
        found = self.database.execute(
            "SELECT id FROM resources WHERE type = ? AND key = ?", (kind, key)
        ).fetchall()
        if len(found) > 1:
            raise RefusedError(412, "multiple-matches", f"Bundle.entry[{number}].request.url")
        if found:
            return found[0][0], False
        made = self.database.execute(
            "INSERT INTO resources (type, key, version, body) VALUES (?, ?, 0, '')", (kind, key)
        )
        return made.lastrowid or 0, True


def resolved(value: Any, names: dict[str, str]) -> Any:
    """The resource with the references inside the transaction replaced by what the entries became."""
    if isinstance(value, dict):
        return {
            name: names.get(part, part)
            if name == "reference" and isinstance(part, str)
            else resolved(part, names)
            for name, part in value.items()
        }
    return [resolved(part, names) for part in value] if isinstance(value, list) else value


class Authority:
    """Gives tokens for assertions signed by the client's keys; each assertion once (RFC 7523, SMART 2.2)."""

    def __init__(self, keys: Path, client: str, url: str) -> None:
        self.keys = KeySet.import_key_set(json.loads(keys.read_text()))
        self.client = client
        self.url = url
        self.used: set[str] = set()
        self.tokens: dict[str, float] = {}

    def give(self, form: dict[str, list[str]]) -> tuple[int, dict[str, Any]]:
        kind = "urn:ietf:params:oauth:client-assertion-type:jwt-bearer"
        if form.get("grant_type") != ["client_credentials"] or form.get("client_assertion_type") != [kind]:
            return 400, {"error": "unsupported_grant_type"}
        try:
            token = jwt.decode(form["client_assertion"][0], self.keys, algorithms=["RS384", "ES384"])
            claims = token.claims
            good = (
                claims["iss"] == claims["sub"] == self.client
                and claims["aud"] == self.url
                and 0 < claims["exp"] - time.time() <= 300
                and claims["jti"] not in self.used
                and token.header["typ"] == "JWT"
            )
        except Exception:  # noqa: BLE001 - whatever is wrong with it
            good = False
        if not good:
            return 400, {"error": "invalid_client"}
        self.used.add(claims["jti"])
        made = secrets.token_urlsafe(24)
        self.tokens[made] = time.time() + 300
        return 200, {
            "access_token": made,
            "token_type": "Bearer",
            "expires_in": 300,
            "scope": form["scope"][0],
        }

    def knows(self, header: str) -> bool:
        return self.tokens.get(header.removeprefix("Bearer "), 0) > time.time()


class Handler(BaseHTTPRequestHandler):
    """One connection."""

    protocol_version = "HTTP/1.1"
    server: Receiver

    def log_message(self, *_: object) -> None:
        """Nothing."""

    def do_GET(self) -> None:
        if self.path == "/fhir/.well-known/smart-configuration" and self.server.authority:
            self.answer(200, {"token_endpoint": self.server.authority.url}, "application/json")
        else:
            self.answer(404, {})

    def do_POST(self) -> None:
        text = self.rfile.read(int(self.headers["Content-Length"]))
        authority = self.server.authority
        if self.path == "/token" and authority:
            self.answer(*authority.give(parse_qs(text.decode())), "application/json")
            return
        if self.path != "/fhir" or self.headers["Content-Type"] != FHIR:
            self.refuse(404, "not-found", "")
            return
        if authority and not authority.knows(self.headers.get("Authorization", "")):
            self.refuse(401, "login", "")
            return
        fault = self.server.fault(self.headers["X-Request-Id"])
        if not self.spoilt(fault):
            self.transact(text, fault)

    def spoilt(self, fault: str) -> bool:
        """Whether a fault met the request before anything was applied."""
        if fault in ("refuse", "break-before"):
            if fault == "refuse":
                self.server.closed_for = 0.4
            self.snap()
        elif fault in ("412", "429", "500", "503"):
            self.refuse(int(fault), "transient", "", {"Retry-After": "1"} if fault == "429" else {})
        elif fault == "page":
            body = b"<html><p>Down for maintenance</p></html>"
            self.send_response(200)
            self.send_header("Content-Type", "text/html")
            self.send_header("Content-Length", str(len(body)))
            self.end_headers()
            self.wfile.write(body)
        else:
            return False
        return True

    def transact(self, text: bytes, fault: str) -> None:
        try:
            told = self.server.store.apply(self.headers["X-Request-Id"], text)
        except RefusedError as error:
            self.refuse(*error.args)
            return
        if fault == "break-after":
            self.snap()
            return
        if fault == "late":
            time.sleep(self.server.late)
        self.answer(200, told, FHIR, half=fault == "half")

    def refuse(self, status: int, code: str, place: str, headers: dict[str, str] | None = None) -> None:
        issue: dict[str, Any] = {"severity": "error", "code": code, "diagnostics": "of patient F-1"}
        if place:
            issue["expression"] = [place]
        self.answer(status, {"resourceType": "OperationOutcome", "issue": [issue]}, FHIR, headers)

    def answer(
        self,
        status: int,
        value: dict[str, Any],
        kind: str = FHIR,
        headers: dict[str, str] | None = None,
        *,
        half: bool = False,
    ) -> None:
        body = json.dumps(value).encode()
        try:
            self.send_response(status)
            self.send_header("Content-Type", kind)
            self.send_header("Content-Length", str(len(body)))
            for name, said in (headers or {}).items():
                self.send_header(name, said)
            self.end_headers()
            self.wfile.write(body[: len(body) // 2] if half else body)
        except OSError:  # who asked has gone
            self.close_connection = True
        if half:
            self.snap()

    def snap(self) -> None:
        """Breaks the connection with a reset."""
        self.connection.setsockopt(socket.SOL_SOCKET, socket.SO_LINGER, struct.pack("ii", 1, 0))
        self.connection.close()
        self.close_connection = True

    def finish(self) -> None:
        with contextlib.suppress(OSError, ValueError):
            super().finish()


class Receiver(ThreadingHTTPServer):
    """The server; refuses connections for a while when `closed_for` is set."""

    daemon_threads = True
    allow_reuse_address = True
    request_queue_size = 64
    closed_for: ClassVar[float] = 0

    def __init__(self, options: argparse.Namespace) -> None:
        super().__init__(("127.0.0.1", options.port), Handler)
        self.store = Store(options.file)
        self.options = options
        self.late = options.late
        url = f"http://127.0.0.1:{self.server_port}/token"
        self.authority = Authority(options.keys, options.client, url) if options.keys else None

    def fault(self, request: str) -> str:
        """What goes wrong with the request that comes now; mostly nothing."""
        number = self.store.note(request, "")
        chance = random.Random(f"{self.options.seed}:{number}")
        found = chance.choice(FAULTS) if chance.random() < self.options.faults else ""
        if found:
            with self.store.lock:
                self.store.database.execute("UPDATE seen SET fault = ? WHERE id = ?", (found, number))
        return found

    def handle_error(self, *_: object) -> None:
        """A connection that broke."""


def main() -> None:
    parser = argparse.ArgumentParser()
    parser.add_argument("file", type=Path)
    parser.add_argument("--port", type=int, default=0)
    parser.add_argument("--faults", type=float, default=0)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--late", type=float, default=1.5)
    parser.add_argument("--keys", type=Path)
    parser.add_argument("--client", default="fhirgallop")
    options = parser.parse_args()
    server = Receiver(options)
    options.port = server.server_port
    print(server.server_port, flush=True)
    while True:
        server.timeout = 0.1
        while not server.closed_for:
            server.handle_request()
        server.server_close()
        time.sleep(server.closed_for)
        server.closed_for = 0
        server.socket = socket.socket(server.address_family, server.socket_type)
        server.server_bind()
        server.server_activate()


if __name__ == "__main__":
    main()
