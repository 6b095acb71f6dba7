"""A record system's FHIR server, as CDS Hooks services read from it: a process of its own, for tests.

    python chart_server.py          prints the port it listens on, on 127.0.0.1

Knows reads and searches by patient and category, with pages, below /fhir. What it holds, and how it
misbehaves, is told it: PUT /_chart with {"resources": [...], "manners": {"Observation/exam": {...}, ...}};
GET /_asked gives what it was asked since. A manner is named by a type, or by type and first category, and
may have

    delay    seconds before it answers
    status   instead of 200, with an OperationOutcome
    body     text instead of the answer
    page     resources on a page
    next     address of the next page, instead of its own
    drip     seconds between single bytes of the answer
    location address that it redirects to
"""

from __future__ import annotations

import json
import time
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer
from typing import Any
from urllib.parse import parse_qs, urlsplit

Json = dict[str, Any]


class Chart(ThreadingHTTPServer):
    """Holds resources and manners, and what was asked."""

    daemon_threads = True

    def __init__(self) -> None:
        super().__init__(("127.0.0.1", 0), Asked)
        self.base = f"http://127.0.0.1:{self.server_address[1]}/fhir"
        self.set({})

    def set(self, given: Json) -> None:
        """Starts anew."""
        self.resources: list[Json] = given.get("resources", [])
        self.manners: Json = given.get("manners", {})
        self.asked: list[Json] = []


class Asked(BaseHTTPRequestHandler):
    """One connection."""

    protocol_version = "HTTP/1.1"
    disable_nagle_algorithm = True
    server: Chart

    def do_PUT(self) -> None:
        self.server.set(json.loads(self.rfile.read(int(self.headers["Content-Length"]))))
        self._send(200, {})

    def do_GET(self) -> None:
        if self.path == "/_asked":
            self._send(200, {"asked": self.server.asked})
            return
        self.server.asked.append({"path": self.path, "headers": dict(self.headers.items())})
        parts = urlsplit(self.path)
        names = {name: values[0] for name, values in parse_qs(parts.query).items()}
        kind, _, id_ = parts.path.removeprefix("/fhir/").partition("/")
        category = names.get("category", "").partition(",")[0]
        manners = self.server.manners
        manner = manners.get(f"{kind}/{category}") or manners.get(kind) or {}
        time.sleep(manner.get("delay", 0))
        if "location" in manner:
            self._send(302, {}, {"Location": manner["location"]})
        elif "status" in manner:
            issue = {"severity": "error", "code": "processing", "diagnostics": "told to refuse"}
            self._send(manner["status"], {"resourceType": "OperationOutcome", "issue": [issue]})
        elif "body" in manner:
            self._send(200, manner["body"])
        elif id_:
            self._read(kind, id_)
        else:
            self._search(kind, names, manner)

    def _read(self, kind: str, id_: str) -> None:
        for one in self.server.resources:
            if (one["resourceType"], one["id"]) == (kind, id_):
                self._send(200, one)
                return
        self._send(404, {"resourceType": "OperationOutcome", "issue": []})

    def _search(self, kind: str, names: dict[str, str], manner: Json) -> None:
        wanted = set(filter(None, names.get("category", "").split(",")))
        hits = [
            one
            for one in self.server.resources
            if one["resourceType"] == kind
            and (not wanted or wanted & {c["code"] for k in one["category"] for c in k["coding"]})
        ]
        size, page = manner.get("page", 1000), int(names.get("page", "0"))
        shown = hits[page * size : (page + 1) * size]
        entry = [{"fullUrl": f"{self.server.base}/{kind}/{one['id']}", "resource": one} for one in shown]
        bundle: Json = {"resourceType": "Bundle", "type": "searchset", "total": len(hits), "entry": entry}
        if (page + 1) * size < len(hits) or "next" in manner:
            query = "&".join(f"{name}={value}" for name, value in {**names, "page": page + 1}.items())
            url = manner.get("next", f"{self.server.base}/{kind}?{query}")
            bundle["link"] = [{"relation": "next", "url": url}]
        self._send(200, bundle, drip=manner.get("drip", 0))

    def _send(
        self, status: int, value: Json | str, headers: dict[str, str] | None = None, *, drip: float = 0
    ) -> None:
        body = (value if isinstance(value, str) else json.dumps(value)).encode()
        self.send_response(status)
        self.send_header("Content-Type", "application/fhir+json")
        self.send_header("Content-Length", str(len(body)))
        for name, text in (headers or {}).items():
            self.send_header(name, text)
        self.end_headers()
        try:
            for at in range(len(body) if drip else 0):
                self.wfile.write(body[at : at + 1])
                time.sleep(drip)
            if not drip:
                self.wfile.write(body)
        except OSError:
            self.close_connection = True

    def log_message(self, *_: object) -> None:
        """Says nothing."""


if __name__ == "__main__":
    serving = Chart()
    print(serving.server_address[1], flush=True)
    serving.serve_forever()
