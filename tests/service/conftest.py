"""The service without a socket, with a database of its own, and the example examination."""

from __future__ import annotations

import contextlib
import json
import os
import socket
import subprocess
import sys
import time
import uuid
from collections.abc import Callable, Iterator
from copy import deepcopy
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import httpx
import pytest
from fastapi import FastAPI
from starlette.testclient import TestClient

from fhirgallop import settings
from fhirgallop.api import process
from fhirgallop.codes import fhirjson
from fhirgallop.service.app import create_app


class Clock:
    """Gives a later minute each time it is asked."""

    def __init__(self) -> None:
        self.at = datetime(2026, 12, 1, 8, 0, tzinfo=UTC)

    def __call__(self) -> datetime:
        self.at += timedelta(minutes=1)
        return self.at


@pytest.fixture
def application(tmp_path: Path, root: Path) -> FastAPI:
    """The service with the examples' maps."""
    chosen = settings.load(
        maps=root / "examples/informatician",
        database=f"sqlite:///{tmp_path / 'service.sqlite3'}",
        max_records=50,
    )
    return create_app(chosen, Clock())


@pytest.fixture
def client(application: FastAPI) -> Iterator[TestClient]:
    """Speaks to the service; what breaks inside comes as the answer a client would get."""
    base = "http://localhost:8470"
    with TestClient(application, base_url=base, raise_server_exceptions=False) as speaking:
        yield speaking


@pytest.fixture(scope="session")
def example(root: Path) -> Callable[..., dict[str, Any]]:
    """The Fernwood examination, with boxes changed: `example(heart={"s4": "no"})`."""
    text = (root / "examples/ehr/fernwood-exam.json").read_text("utf-8")

    def make(**groups: dict[str, Any]) -> dict[str, Any]:
        record: dict[str, Any] = json.loads(text)
        for name, boxes in groups.items():
            record[name] = {**record[name], **boxes}
        return record

    return make


HERE = "http://localhost:8470"
SERVER = "https://fernwood.example/fhir"
SEEN = datetime.fromisoformat("2026-03-14T10:00:00+01:00")


@pytest.fixture
def hooked_with(tmp_path: Path, root: Path) -> Iterator[Callable[..., TestClient]]:
    """The service half an hour after the example examination, with settings of choice."""
    opened: list[TestClient] = []

    def make(**given: Any) -> TestClient:
        chosen = settings.load(
            maps=root / "examples/informatician",
            database=f"sqlite:///{tmp_path / 'hooks.sqlite3'}",
            **{"pages": HERE, **given},
        )
        speaking = TestClient(create_app(chosen, lambda: SEEN), base_url=HERE, raise_server_exceptions=False)
        opened.append(speaking.__enter__())
        return speaking

    yield make
    for one in opened:
        one.__exit__()


@pytest.fixture
def hooked(hooked_with: Callable[..., TestClient]) -> TestClient:
    """The same with the ordinary settings, and pages to link to."""
    return hooked_with()


def _searchset(resources: list[dict[str, Any]]) -> dict[str, Any]:
    entries = [
        {"fullUrl": f"{SERVER}/{one['resourceType']}/{one['id']}", "resource": one} for one in resources
    ]
    return {"resourceType": "Bundle", "type": "searchset", "total": len(entries), "entry": entries}


@pytest.fixture(scope="session")
def searchset() -> Callable[[list[dict[str, Any]]], dict[str, Any]]:
    """Resources as the answer of a search on the example server."""
    return _searchset


@pytest.fixture(scope="session")
def _kept(root: Path) -> list[dict[str, Any]]:
    """The Observations of the Fernwood examination as a server keeps them: ids and references of its own."""
    record = (root / "examples/ehr/fernwood-exam.json").read_bytes()
    result = process(record, root / "examples/informatician/fernwood-heart-form.yaml")
    bundle = json.loads(fhirjson.write(result.bundle))
    kept = [e for e in bundle["entry"] if e["resource"]["resourceType"] == "Observation"]
    names = {entry["fullUrl"]: f"Observation/obs-{n}" for n, entry in enumerate(kept)}
    for entry in kept:
        resource = entry["resource"]
        resource["id"] = names[entry["fullUrl"]].partition("/")[2]
        resource["subject"] = {"reference": "Patient/p-20417"}
        resource["encounter"] = {"reference": "Encounter/v-8812"}
        if "hasMember" in resource:
            resource["hasMember"] = [{"reference": names[m["reference"]]} for m in resource["hasMember"]]
    return [entry["resource"] for entry in kept]


@pytest.fixture
def kept(_kept: list[dict[str, Any]]) -> list[dict[str, Any]]:
    """A copy of them to change."""
    return deepcopy(_kept)


@pytest.fixture
def prefetch(kept: list[dict[str, Any]], root: Path) -> Callable[..., dict[str, Any]]:
    """Everything the services ask for: `prefetch("mitral-stenosis-known-area", conditions=None)`."""

    def make(name: str = "atrial-fibrillation-today", **changed: Any) -> dict[str, Any]:
        text = (root / f"examples/clinician/{name}.chart.json").read_text("utf-8")
        chart = [entry["resource"] for entry in json.loads(text)["entry"]]
        by_type: dict[str, list[dict[str, Any]]] = {}
        for resource in chart:
            by_type.setdefault(resource["resourceType"], []).append(resource)
        found = {
            "patient": by_type["Patient"][0],
            "exam": _searchset(kept),
            "results": _searchset(by_type.get("Observation", [])),
            "reports": _searchset(by_type.get("DiagnosticReport", [])),
            "conditions": _searchset(by_type.get("Condition", [])),
            "procedures": _searchset(by_type.get("Procedure", [])),
            "devices": _searchset(by_type.get("Device", [])),
        }
        return {**found, **changed}

    return make


@pytest.fixture
def hook_call(prefetch: Callable[..., dict[str, Any]]) -> Callable[..., dict[str, Any]]:
    """A well-formed call: `hook_call("patient-view", prefetch=..., context={...})`."""

    def make(hook: str = "patient-view", **changed: Any) -> dict[str, Any]:
        context = {
            "userId": "Practitioner/7",
            "patientId": "p-20417",
            "encounterId": "v-8812",
            **changed.pop("context", {}),
        }
        body = {
            "hook": hook,
            "hookInstance": str(uuid.uuid4()),
            "fhirServer": SERVER,
            "context": {name: value for name, value in context.items() if value is not None},
            "prefetch": prefetch(),
        }
        return {**body, **changed}

    return make


class ChartPeer:
    """The record system's FHIR server in a process of its own; see tests/peers/chart_server.py."""

    def __init__(self, port: int) -> None:
        self.origin = f"http://127.0.0.1:{port}"
        self.base = f"{self.origin}/fhir"
        self._client = httpx.Client(base_url=self.origin, trust_env=False)

    def holds(self, resources: list[dict[str, Any]], **manners: dict[str, Any]) -> None:
        """What it has from now on; `Observation__exam={"delay": 1}` is the manner of `Observation/exam`."""
        named = {name.replace("__", "/"): manner for name, manner in manners.items()}
        assert self._client.put("/_chart", json={"resources": resources, "manners": named}).is_success

    def asked(self) -> list[dict[str, Any]]:
        """Paths and headers since."""
        found: list[dict[str, Any]] = self._client.get("/_asked").json()["asked"]
        return found

    def get(self, path: str) -> Any:
        """What it answers the test itself."""
        return self._client.get(f"{self.base}/{path}").json()

    def close(self) -> None:
        self._client.close()


@pytest.fixture(scope="session")
def _chart_peer(root: Path) -> Iterator[ChartPeer]:
    started = subprocess.Popen(
        [sys.executable, str(root / "tests/peers/chart_server.py")], stdout=subprocess.PIPE, text=True
    )
    assert started.stdout
    peer = ChartPeer(int(started.stdout.readline()))
    yield peer
    peer.close()
    started.kill()
    started.communicate()


@pytest.fixture
def chart_peer(_chart_peer: ChartPeer, prefetch: Callable[..., dict[str, Any]]) -> ChartPeer:
    """The server with everything that the services ask for."""
    found = prefetch()
    entries = [e["resource"] for key, value in found.items() if key != "patient" for e in value["entry"]]
    _chart_peer.holds([found["patient"], *entries])
    return _chart_peer


class ServiceProcess:
    """The service in a process of its own, on one port and one database however often it is started."""

    def __init__(self, folder: Path, root: Path, settings: dict[str, object]) -> None:
        with socket.socket() as free:
            free.bind(("127.0.0.1", 0))
            self.port = free.getsockname()[1]
        self.base = f"http://127.0.0.1:{self.port}"
        self.database = str(settings.pop("DATABASE", f"sqlite:///{folder / 'process.sqlite3'}"))
        self._log = folder / f"service-{self.port}.log"
        given = {
            "PORT": self.port,
            "MAPS": root / "examples/informatician",
            "DATABASE": self.database,
            "FREE_DISK": 0,
            **settings,
        }
        env = {name: value for name, value in os.environ.items() if not name.startswith("FHIRGALLOP_")}
        self._env = env | {f"FHIRGALLOP_{name}": str(value) for name, value in given.items()}
        self.process: subprocess.Popen[bytes] | None = None

    def start(self) -> None:
        """Starts it, and waits until it answers."""
        with self._log.open("ab") as log:
            self.process = subprocess.Popen(
                [sys.executable, "-m", "fhirgallop", "serve"], env=self._env, stdout=log, stderr=log
            )
        deadline = time.monotonic() + 60
        while time.monotonic() < deadline and self.process.poll() is None:
            with contextlib.suppress(httpx.TransportError):
                httpx.get(f"{self.base}/health", trust_env=False)
                return
            time.sleep(0.05)
        raise AssertionError(self.log())

    def kill(self) -> None:
        """Ends it without warning (SIGKILL)."""
        if self.process:
            self.process.kill()
            self.process.wait(30)

    def end(self) -> int:
        """Tells it to end (SIGTERM), and waits until it has."""
        assert self.process
        self.process.terminate()
        return self.process.wait(30)

    def log(self) -> str:
        """What it logged so far."""
        return self._log.read_text("utf-8")


@pytest.fixture
def serving(tmp_path: Path, root: Path) -> Iterator[Callable[..., ServiceProcess]]:
    """Starts the service: `serving(DATABASE=..., BATCH_WORKERS=2)`; what still runs in the end is killed."""
    running: list[ServiceProcess] = []

    def start(**settings: object) -> ServiceProcess:
        running.append(ServiceProcess(tmp_path, root, settings))
        running[-1].start()
        return running[-1]

    yield start
    for one in running:
        one.kill()


PATIENT = "https://fernwood.example/patients|F-20417"


@pytest.fixture(scope="session")
def still(
    tmp_path_factory: pytest.TempPathFactory, root: Path, example: Callable[..., dict[str, Any]]
) -> Iterator[TestClient]:
    """The service after it took the Fernwood examination, for tests that change nothing."""
    folder = tmp_path_factory.mktemp("still")
    chosen = settings.load(
        maps=root / "examples/informatician", database=f"sqlite:///{folder / 'still.sqlite3'}"
    )
    with TestClient(create_app(chosen, Clock()), base_url=HERE, raise_server_exceptions=False) as speaking:
        answer = speaking.post("/exams", params={"map": "fernwood-heart-form"}, json=example())
        assert answer.status_code == 200
        yield speaking


@pytest.fixture
def examined(client: TestClient, example: Callable[..., dict[str, Any]]) -> TestClient:
    """The service after it took the Fernwood examination."""
    answer = client.post("/exams", params={"map": "fernwood-heart-form"}, json=example())
    assert answer.status_code == 200
    return client


@pytest.fixture
def of_patient() -> dict[str, str]:
    """The search parameter for the patient of the example."""
    return {"patient:identifier": PATIENT}


@pytest.fixture(scope="session")
def _coded_bundle(root: Path) -> bytes:
    record = (root / "examples/ehr/fernwood-exam.json").read_bytes()
    at = datetime(2026, 12, 1, 8, 0, tzinfo=UTC)
    result = process(record, root / "examples/informatician/fernwood-heart-form.yaml", recorded=at)
    return fhirjson.write(result.bundle)


@pytest.fixture
def coded_bundle(_coded_bundle: bytes) -> dict[str, Any]:
    """The Bundle of the example as the command line gives it, to be changed and sent."""
    made: dict[str, Any] = json.loads(_coded_bundle)
    return made


@pytest.fixture
def observation(coded_bundle: dict[str, Any]) -> dict[str, Any]:
    """One Observation of it, without an identity of ours and without profile."""
    made: dict[str, Any] = deepcopy(coded_bundle["entry"][0]["resource"])
    del made["meta"]
    made["identifier"] = [{"system": "https://fernwood.example/results", "value": "R-1"}]
    return made
