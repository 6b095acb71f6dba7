"""The other commands: map check and schema, serve, demo, version and help."""

from __future__ import annotations

import json
import os
import re
import signal
import socket
import subprocess
import sys
from pathlib import Path
from typing import Any

import httpx
import pytest

from fhirgallop.version import VERSION

RECORDS = "pid,no,at,hr,weight,s4,words,shoe\n" + "".join(
    f"P-1,E-{n},2026-03-14T09:30:00+01:00,78,81.5,{s4},,43\n"
    for n, s4 in enumerate(("yes", "loud", "loud", ""))
)


@pytest.fixture
def bedside(root: Path) -> Path:
    return root / "tests/cases/faces/maps/bedside.yaml"


def test_map_check_tells_every_fault_with_its_line(call: Any, tmp_path: Path, bedside: Path) -> None:
    bad = tmp_path / "bad.yaml"
    bad.write_text(
        bedside.read_text("utf-8").replace("heart-sound.s4", "heart-sound.s5").replace("/min", "bushel"),
        "utf-8",
    )
    done = call("map", "check", bad)
    assert done.code == 3
    faults = [line for line in done.err.splitlines() if line.startswith("error: ")]
    assert [re.findall(r"^error: \S*bad\.yaml, line (\d+) column", line) for line in faults] == [
        ["12"],
        ["14"],
    ]
    assert "heart-sound.s4" in done.err, "what may have been meant is named"


def test_map_check_of_a_sound_map(call: Any, bedside: Path) -> None:
    done = call("map", "check", bedside)
    assert done.code == 0
    assert "no fault" in done.out.decode()


def test_map_check_with_records_counts_what_is_left_open(call: Any, tmp_path: Path, bedside: Path) -> None:
    table = tmp_path / "records.csv"
    table.write_text(RECORDS, "utf-8")
    done = call("map", "check", bedside, "--with", table)
    told = done.out.decode()
    assert done.code == 1
    assert re.search(r"shoe\s+unread\s+4\s+0", told)
    assert re.search(r"s4\s+read\s+3\s+1", told)
    assert re.search(r"s4\s+loud\s+2", told)
    assert "2 would be refused" in told
    assert re.search(
        r"error: .*field s4: This wording is not among .*\[map-value-unknown\] \(met 2 times\)", told
    )


def test_map_check_with_records_that_fit(call: Any, tmp_path: Path, bedside: Path) -> None:
    table = tmp_path / "records.csv"
    table.write_text(
        "pid,no,at,hr,weight,s4,words\nP-1,E-1,2026-03-14T09:30:00+01:00,78,81.5,no,quiet\n", "utf-8"
    )
    assert call("map", "check", bedside, "--with", table).code == 0


def test_map_schema_is_json_schema(call: Any) -> None:
    told = json.loads(call("map", "schema").out)
    assert "json-schema.org" in told["$schema"]
    assert "lines" in told["properties"]


def test_version_and_help(call: Any) -> None:
    assert call("--version").out.decode().strip() == f"fhirgallop {VERSION}"
    told = call("--help").out.decode()
    assert all(name in told for name in ("code", "map", "serve", "demo", "validate", "Exit codes"))
    for words in (("code",), ("map", "check"), ("serve",)):
        assert "Exit codes" in call(*words, "--help").out.decode(), words


def test_demo_once(run: Any) -> None:
    done = run("demo", "--once", NO_COLOR="1")
    assert done.returncode == 0, done.stderr
    assert done.stderr == ""
    told = done.stdout
    address = re.search(r"http://127\.0\.0\.1:(\d+)", told)
    assert address
    for heading in ("field", "finding", "presence", "code", "value"):
        assert heading in told
    assert re.search(r"heart\.s4\s*│\s*Fourth heart sound\s*│\s*present\s*│\s*SNOMED CT 4592006", told)
    assert re.search(r"heart\.s3\s*│\s*Third heart sound\s*│\s*absent", told)
    assert re.search(r"vitals\.spo2\s*│[^│]*│\s*not-examined", told)
    assert "36.8" in told
    assert "\x1b" not in told
    with pytest.raises(OSError), socket.create_connection(("127.0.0.1", int(address[1])), timeout=2):
        pass


@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM])
def test_demo_stays_up_until_it_is_ended_and_leaves_nothing(tmp_path: Path, number: signal.Signals) -> None:
    running = subprocess.Popen(
        [sys.executable, "-u", "-m", "fhirgallop", "demo"],
        stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True,
        env={**os.environ, "TMPDIR": str(tmp_path), "NO_COLOR": "1"},
    )  # fmt: skip
    assert running.stdout
    said = ""
    while "Ctrl-C" not in said:
        line = running.stdout.readline()
        assert line, "the demo ended by itself"
        said += line
    address = re.search(r"http://127\.0\.0\.1:\d+", said)
    assert address
    assert httpx.get(f"{address[0]}/health", trust_env=False).status_code == 200
    assert "curl" in said
    assert list(tmp_path.iterdir())
    running.send_signal(number)
    _, error = running.communicate(timeout=30)
    assert "Traceback" not in error
    assert list(tmp_path.iterdir()) == []


@pytest.fixture
def free_port() -> int:
    with socket.socket() as taken:
        taken.bind(("127.0.0.1", 0))
        port: int = taken.getsockname()[1]
    return port


def test_serve_answers_and_keeps_queries_out_of_its_log(
    tmp_path: Path, root: Path, bedside: Path, free_port: int
) -> None:
    running = subprocess.Popen(
        [sys.executable, "-m", "fhirgallop", "serve", "--port", str(free_port), "--maps", str(bedside.parent),
         "--database", f"sqlite:///{tmp_path / 'serve.sqlite3'}"],
        stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True,
    )  # fmt: skip
    assert running.stderr
    log = ""
    while "running on" not in log.lower():
        line = running.stderr.readline()
        assert line, log
        log += line
    base = f"http://127.0.0.1:{free_port}"
    with httpx.Client(base_url=base, trust_env=False) as client:
        record = {"pid": "P-secret", "no": "E-secret", "at": "2026-03-14T09:30:00+01:00", "s4": "yes"}
        assert client.post("/exams?map=bedside", json=record).status_code == 200
        assert client.get("/maps/P-secret?patient=P-secret").status_code == 400
    running.send_signal(signal.SIGTERM)
    out, rest = running.communicate(timeout=30)
    log += rest
    assert re.search(r"POST /exams .*status=200", log)
    assert "secret" not in log + out
    assert "Traceback" not in log


@pytest.mark.parametrize(
    ("words", "code", "said"),
    [
        (("--host", "0.0.0.0"), 3, "without authorisation"),
        (("--maps", "/no/such/folder"), 3, "does not exist"),
        (("--port", "70000"), 3, "FHIRGALLOP_PORT"),
        (("--database", "nonsense"), 3, "not an address"),
    ],
)
def test_serve_says_what_it_cannot_use(
    call: Any,
    bedside: Path,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    words: Any,
    code: int,
    said: str,
) -> None:
    monkeypatch.chdir(tmp_path)
    done = call("serve", "--maps", bedside.parent, *words)
    assert (done.code, said in done.err) == (code, True), done.err
    assert list(tmp_path.iterdir()) == []


def test_serve_on_a_port_that_is_taken(run: Any, bedside: Path, tmp_path: Path) -> None:
    with socket.socket() as taken:
        taken.bind(("127.0.0.1", 0))
        taken.listen()
        port = taken.getsockname()[1]
        done = run(
            "serve",
            "--port",
            str(port),
            "--maps",
            bedside.parent,
            "--database",
            f"sqlite:///{tmp_path / 'x'}",
        )
    assert done.returncode == 4
    assert f"port {port}" in done.stderr
