"""The service under load on loopback, one worker process, in one run with a plain route of ready bytes.

Needs `wrk` (https://github.com/wg/wrk; Debian package of that name). Each measurement lasts BENCH_SECONDS
(environment; 10 unless set, 60 for the figures that are published). Every posted examination is a new one.
Run alone by `python tests/bench/run.py bench_service`.
"""

from __future__ import annotations

import contextlib
import json
import os
import re
import shutil
import socket
import statistics
import subprocess
import sys
import tempfile
import time
from collections.abc import Iterator
from copy import deepcopy
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import httpx
from measuring import Row, at_most

from fhirgallop.api import process
from fhirgallop.codes import fhirjson

ROOT = Path(__file__).resolve().parent.parent.parent
MAP = ROOT / "examples/informatician/fernwood-heart-form.yaml"
EXAM = ROOT / "examples/ehr/fernwood-exam.json"
CHART = ROOT / "examples/clinician/atrial-fibrillation-today.chart.json"
SECONDS = int(os.environ.get("BENCH_SECONDS", "10"))
ROUNDS = 3
READY_BYTES = 48_000

PLAIN = f"""
import sys, uvicorn
from fastapi import FastAPI, Request
from starlette.responses import Response
app = FastAPI()
body = b'"' + b"x" * {READY_BYTES} + b'"'

@app.post("/ready-bytes")
async def ready(request: Request) -> Response:
    await request.body()
    return Response(body, media_type="application/json")

uvicorn.run(app, port=int(sys.argv[1]), log_level="warning", access_log=False)
"""

# every request gets a number of its own in place of @@; the figures come as one line of JSON
SCRIPT = """
local file = io.open(os.getenv("WRK_BODY"), "rb")
local parts, text = {}, file:read("*a")
file:close()
local from = 1
while true do
  local at = text:find("@@", from, true)
  if not at then break end
  parts[#parts + 1] = text:sub(from, at - 1)
  from = at + 2
end
parts[#parts + 1] = text:sub(from)
local number = tonumber(os.getenv("WRK_FIRST"))
wrk.method = "POST"
wrk.headers["Content-Type"] = "application/json"
wrk.headers["Accept"] = os.getenv("WRK_ACCEPT")
request = function()
  number = number + 1
  return wrk.format(nil, nil, nil, table.concat(parts, string.format("%08d", number)))
end
done = function(summary, latency, requests)
  local errors = summary.errors
  io.write(string.format('{"p50": %f, "p99": %f, "rate": %f, "bad": %d}\\n',
    latency:percentile(50) / 1000, latency:percentile(99) / 1000,
    summary.requests / summary.duration * 1e6,
    errors.status + errors.connect + errors.read + errors.write + errors.timeout))
end
"""


@dataclass(frozen=True)
class Load:
    """What one run of wrk found: milliseconds, requests a second."""

    p50: float
    p99: float
    rate: float


class Bench:
    """Sends load, and numbers what it sends."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self._first = 0
        (folder / "load.lua").write_text(SCRIPT, "utf-8")

    def load(self, address: str, body: Path, *, connections: int, seconds: int, accept: str) -> Load:
        """Sends `body` over so many connections; every answer has to be a good one."""
        self._first += 1_000_000
        env = {
            **os.environ, "WRK_BODY": str(body), "WRK_FIRST": str(self._first), "WRK_ACCEPT": accept,
        }  # fmt: skip
        words = [
            "wrk",
            "-t1",
            "--timeout=30s",
            f"-c{connections}",
            f"-d{seconds}s",
            "-s",
            self.folder / "load.lua",
            address,
        ]
        done = subprocess.run(words, env=env, capture_output=True, check=True, text=True)
        found = json.loads(re.findall(r"^\{.*\}$", done.stdout, re.MULTILINE)[-1])
        if found.pop("bad"):
            raise RuntimeError(f"not every answer of {address} was a good one")
        return Load(**found)


@contextlib.contextmanager
def _server(words: list[str], port: int, path: str, **env: str) -> Iterator[int]:
    with (Path(env.pop("LOG"))).open("wb") as log:
        process_ = subprocess.Popen(words, env={**os.environ, **env}, stdout=log, stderr=log)
    try:
        for _ in range(400):
            with contextlib.suppress(httpx.TransportError):
                httpx.get(f"http://127.0.0.1:{port}{path}", trust_env=False)
                break
            time.sleep(0.05)
        yield process_.pid
    finally:
        process_.terminate()
        process_.wait(30)


def _free() -> int:
    with socket.socket() as free:
        free.bind(("127.0.0.1", 0))
        port: int = free.getsockname()[1]
        return port


def _memory(pid: int) -> float:
    """Megabytes resident."""
    status = Path(f"/proc/{pid}/status").read_text("ascii")
    return int(re.findall(r"VmRSS:\s+(\d+)", status)[0]) / 1024


def _bodies(folder: Path) -> tuple[Path, Path]:
    """An examination whose number is new each time, and a hook call with 200 resources prefetched."""
    text = EXAM.read_text("utf-8")
    record = json.loads(text)
    exam = folder / "exam.json"
    new = text.replace(record["exam"]["number"], "E-@@").replace(record["patient"]["number"], "F-@@")
    exam.write_text(new, "utf-8")
    (folder / "again.json").write_text(text, "utf-8")
    call = folder / "call.json"
    today = datetime.now(tz=UTC).date().isoformat()  # an old examination raises nothing
    call.write_text(json.dumps(_call()).replace("2026-03-14", today), "utf-8")
    return exam, call


def _call() -> dict[str, Any]:
    bundle = json.loads(fhirjson.write(process(EXAM.read_bytes(), MAP).bundle))
    exam = [e["resource"] for e in bundle["entry"] if e["resource"]["resourceType"] == "Observation"]
    for number, resource in enumerate(exam):
        resource.update(id=f"o-{number}", subject={"reference": "Patient/p-20417"},
                        encounter={"reference": "Encounter/v-8812"})  # fmt: skip
        resource.pop("hasMember", None)
    chart: dict[str, list[dict[str, Any]]] = {}
    for entry in json.loads(CHART.read_bytes())["entry"]:
        chart.setdefault(entry["resource"]["resourceType"], []).append(entry["resource"])
    others = sum(len(found) for found in chart.values()) - len(chart["Observation"])
    results = chart["Observation"]
    while len(exam) + others + len(results) < 200:
        results.append({**deepcopy(results[0]), "id": f"r-{len(results)}"})
    found = {"patient": chart["Patient"][0], "exam": _searchset(exam), "results": _searchset(results)}
    for key, kind in (("reports", "DiagnosticReport"), ("conditions", "Condition"),
                      ("procedures", "Procedure"), ("devices", "Device")):  # fmt: skip
        found[key] = _searchset(chart.get(kind, []))
    return {
        "hook": "patient-view",
        "hookInstance": "0b7c1c1e-5d2e-4f5a-9a37-0000@@",
        "fhirServer": "https://fernwood.example/fhir",
        "context": {"userId": "Practitioner/7", "patientId": "p-20417", "encounterId": "v-8812"},
        "prefetch": found,
    }


def _searchset(resources: list[dict[str, Any]]) -> dict[str, Any]:
    base = "https://fernwood.example/fhir"
    entries = [{"fullUrl": f"{base}/{one['resourceType']}/{one['id']}", "resource": one} for one in resources]
    return {"resourceType": "Bundle", "type": "searchset", "total": len(entries), "entry": entries}


def rows() -> Iterator[Row]:
    """The table's rows."""
    if shutil.which("wrk") is None:
        print("wrk is not installed: the service is not measured", file=sys.stderr)
        return
    with tempfile.TemporaryDirectory() as name, contextlib.ExitStack() as stack:
        folder = Path(name)
        bench, (exam, call) = Bench(folder), _bodies(folder)
        plain = _free()
        (folder / "plain.py").write_text(PLAIN, "utf-8")
        words = [sys.executable, str(folder / "plain.py"), str(plain)]
        stack.enter_context(_server(words, plain, "/openapi.json", LOG=str(folder / "plain.log")))
        ready = f"http://127.0.0.1:{plain}/ready-bytes"
        for durable in (True, False):
            with _service(folder, durable=durable) as (port, pid):
                base = f"http://127.0.0.1:{port}"
                yield from _exams(bench, ready, f"{base}/exams?map=fernwood-heart-form", exam, pid, durable)
                if durable:
                    yield from _cards(bench, f"{base}/cds-services/exam-review-patient-view", call)


@contextlib.contextmanager
def _service(folder: Path, *, durable: bool) -> Iterator[tuple[int, int]]:
    """The service with a database of its own: its port and process."""
    port = _free()
    settings = {
        "PORT": port, "MAPS": MAP.parent, "RATE": 0, "FREE_DISK": 0, "LOG_FORM": "json", "DURABLE": durable,
        "DATABASE": f"sqlite:///{folder / f'bench-{durable}.sqlite3'}",
    }  # fmt: skip
    env = {f"FHIRGALLOP_{name}": str(value) for name, value in settings.items()}
    words = [sys.executable, "-m", "fhirgallop", "serve"]
    with _server(words, port, "/health", LOG=str(folder / f"log-{durable}"), **env) as pid:
        yield port, pid


def _exams(bench: Bench, ready: str, post: str, exam: Path, pid: int, durable: bool) -> Iterator[Row]:
    fhir, again = "application/fhir+json", exam.with_name("again.json")
    bench.load(post, exam, connections=16, seconds=5, accept=fhir)  # caches, pools and heap find their size
    memory = _memory(pid)
    kept = "safe from a power cut" if durable else "safe from a kill"
    for connections in (1, 16):
        found: dict[str, list[Load]] = {"ready": [], "new": [], "again": []}
        for _ in range(ROUNDS):
            for name, address, body in (("ready", ready, exam), ("new", post, exam), ("again", post, again)):
                seconds = max(1, SECONDS // ROUNDS)
                load = bench.load(address, body, connections=connections, seconds=seconds, accept=fhir)
                found[name].append(load)
        for name, meant in (("new", "each a new examination"), ("again", "the same examination again")):
            pairs = zip(found[name], found["ready"], strict=True)
            ratio = statistics.median(above.p50 / below.p50 for above, below in pairs)
            p50, p99, rate = (
                statistics.median(getattr(one, part) for one in found[name])
                for part in ("p50", "p99", "rate")
            )
            what = f"checked POST /exams, {meant}, {kept}, {connections} connections"
            yield at_most(f"{what}: p50 / that of a ready-bytes route", ratio, 4, fails=300)
            yield at_most(f"{what}: p99 (p50 {p50:.1f} ms, {rate:.0f} a second)", p99, 50, "ms", fails=500)
    yield at_most(f"memory after that load, {kept} / before", _memory(pid) / memory, 1.1, fails=1.3)


def _cards(bench: Bench, hook: str, call: Path) -> Iterator[Row]:
    for connections in (1, 4):
        bench.load(hook, call, connections=connections, seconds=1, accept="application/json")
        found = bench.load(hook, call, connections=connections, seconds=SECONDS, accept="application/json")
        what = f"patient-view with 200 resources prefetched, {connections} connections"
        yield at_most(f"{what}: p50 ({found.rate:.0f} a second)", found.p50, 100, "ms", fails=500)
        yield at_most(f"{what}: p99", found.p99, 100, "ms", fails=500)
