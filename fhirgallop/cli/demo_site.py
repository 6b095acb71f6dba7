"""An invented clinic for the demonstration: its record system, and the service beside it, on this machine."""

from __future__ import annotations

import json
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from datetime import datetime, timedelta
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer
from pathlib import Path
from typing import TYPE_CHECKING, Any, Final

import typer

from fhirgallop.cli.shared import Exit, complain

if TYPE_CHECKING:
    import uvicorn

PATIENCE: Final = 30.0
_FHIR: Final = "application/fhir+json"
_KINDS: Final = {
    "results": "Observation",
    "reports": "DiagnosticReport",
    "conditions": "Condition",
    "procedures": "Procedure",
    "devices": "Device",
}


class RecordSystem:
    """Keeps a chart in memory, takes transactions at `/fhir`, and gives what a CDS Hooks service asks for.

    Only as much of a FHIR server as the demonstration needs: conditional update by identifier, conditional
    create, references inside a transaction, and to patient and encounter by their identifiers.
    """

    def __init__(self, chart: dict[str, Any]) -> None:
        self._chart = [entry["resource"] for entry in chart["entry"]]
        self._known = {
            (held["system"], held["value"]): f"{one['resourceType']}/{one['id']}"
            for one in self._chart
            if one["resourceType"] in ("Patient", "Encounter")
            for held in one["identifier"]
        }
        self._ids: dict[str, str] = {}
        self._kept: dict[str, dict[str, Any]] = {}
        self._arrived = threading.Event()
        self._answer: list[dict[str, Any]] = []
        self._server = ThreadingHTTPServer(("127.0.0.1", 0), _handler(self._transaction))
        self._server.daemon_threads = True
        self.base: Final = f"http://127.0.0.1:{self._server.server_port}/fhir"
        threading.Thread(target=self._server.serve_forever, args=(0.05,), daemon=True).start()

    def close(self) -> None:
        """Stops listening."""
        self._server.shutdown()
        self._server.server_close()

    def arrived(self, seconds: float) -> list[dict[str, Any]]:
        """The entries of the answer to the last transaction; empty when none came in time."""
        self._arrived.wait(seconds)
        return self._answer

    def prefetch(self) -> dict[str, Any]:
        """The chart, and the examination as it was delivered, as `patient-view` asks for them."""
        by_kind: dict[str, list[dict[str, Any]]] = {}
        for one in self._chart:
            by_kind.setdefault(one["resourceType"], []).append(one)
        exam = [one for one in self._kept.values() if one["resourceType"] == "Observation"]
        return {
            "patient": by_kind["Patient"][0],
            "exam": self._searchset(exam),
            **{name: self._searchset(by_kind.get(kind, [])) for name, kind in _KINDS.items()},
        }

    def _searchset(self, resources: list[dict[str, Any]]) -> dict[str, Any]:
        entries = [
            {"fullUrl": f"{self.base}/{one['resourceType']}/{one['id']}", "resource": one}
            for one in resources
        ]
        return {"resourceType": "Bundle", "type": "searchset", "total": len(entries), "entry": entries}

    def _transaction(self, bundle: dict[str, Any]) -> dict[str, Any]:
        names = {entry["fullUrl"]: self._named(entry) for entry in bundle["entry"]}
        answer = []
        for entry in bundle["entry"]:
            name = names[entry["fullUrl"]]
            status = "200 OK" if name in self._kept else "201 Created"
            self._kept[name] = {**self._resolved(entry["resource"], names), "id": name.partition("/")[2]}
            answer.append({"response": {"status": status, "location": f"{name}/_history/1", "etag": 'W/"1"'}})
        self._answer = answer
        self._arrived.set()
        return {"resourceType": "Bundle", "type": "transaction-response", "entry": answer}

    def _named(self, entry: dict[str, Any]) -> str:
        """`Type/id`: the same for the same condition, as conditional update and create want it."""
        kind = entry["resource"]["resourceType"]
        condition = entry["request"].get("ifNoneExist", entry["request"]["url"])
        number = self._ids.setdefault(f"{kind} {condition}", str(len(self._ids) + 1))
        return f"{kind}/r-{number}"

    def _resolved(self, value: Any, names: dict[str, str]) -> Any:
        if isinstance(value, list):
            return [self._resolved(part, names) for part in value]
        if not isinstance(value, dict):
            return value
        found = {name: self._resolved(part, names) for name, part in value.items()}
        if "reference" in found:
            found["reference"] = names.get(found["reference"], found["reference"])
        elif isinstance(held := found.get("identifier"), dict):
            known = self._known.get((held.get("system", ""), held.get("value", "")))
            return {**found, "reference": known} if known else found
        return found


def _handler(transaction: Callable[[dict[str, Any]], dict[str, Any]]) -> type[BaseHTTPRequestHandler]:
    class Handler(BaseHTTPRequestHandler):
        protocol_version = "HTTP/1.1"

        def log_message(self, *_: object) -> None:
            """Nothing: the demonstration's output is for people."""

        def do_POST(self) -> None:
            text = self.rfile.read(int(self.headers["Content-Length"]))
            body = json.dumps(transaction(json.loads(text))).encode()
            self.send_response(200)
            self.send_header("Content-Type", _FHIR)
            self.send_header("Content-Length", str(len(body)))
            self.end_headers()
            self.wfile.write(body)

    return Handler


@contextmanager
def running(folder: Path, record_system: RecordSystem, at: datetime) -> Iterator[str]:
    """The service on a free port, with its database in `folder` and its clock set; gives its address."""
    from fhirgallop import assets, settings  # noqa: PLC0415 - heavy together; --help stays quick
    from fhirgallop.service.app import create_app  # noqa: PLC0415
    from fhirgallop.service.server import Server  # noqa: PLC0415

    chosen = settings.load(
        host="127.0.0.1", port=0, maps=assets.path("examples", "informatician"),
        database=f"sqlite:///{folder / 'demo.sqlite3'}", deliver_to=record_system.base, loopback_http=True,
        finish_seconds=2,
    )  # fmt: skip
    begin = time.monotonic()
    server = Server(create_app(chosen, lambda: at + timedelta(seconds=time.monotonic() - begin)), chosen)
    thread = threading.Thread(target=server.run, daemon=True)
    thread.start()
    try:
        yield f"http://{chosen.host}:{_port(server)}"
    finally:
        server.should_exit = True
        thread.join(PATIENCE)


def _port(server: uvicorn.Server) -> int:
    deadline = time.monotonic() + PATIENCE
    while not server.started:
        if time.monotonic() > deadline:
            complain("the service did not start within half a minute")
            raise typer.Exit(Exit.UNUSABLE)
        time.sleep(0.02)
    port: int = server.servers[0].sockets[0].getsockname()[1]
    return port
