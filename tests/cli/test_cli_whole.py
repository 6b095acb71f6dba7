"""The command as a person meets it: help, demo, serve, and life without colour and terminal."""

from __future__ import annotations

import os
import pty
import signal
import subprocess
import sys
from pathlib import Path
from typing import Any

import httpx
import pytest

WIDE = {"COLUMNS": "200"}


@pytest.mark.parametrize(
    ("words", "codes"),
    [
        ([], "01234"),
        (["code"], "01234"),
        (["map", "check"], "013"),
        (["demo"], "014"),
        (["serve"], "034"),
    ],
)
def test_help_says_the_exit_codes(run: Any, words: list[str], codes: str) -> None:
    done = run(*words, "--help", **WIDE)
    assert done.returncode == 0
    said = " ".join(done.stdout.decode().replace("│", " ").split())
    (listed,) = said.split("Exit codes: ")[1:]
    for code in codes:
        assert f"{code} " in listed


def test_no_words_or_wrong_ones_are_a_wrong_call(run: Any) -> None:
    assert run("frobnicate").returncode == 2
    assert run().returncode == 2
    assert run("--version").stdout.decode().startswith("fhirgallop ")


def test_demo_shows_the_example_and_ends(run: Any) -> None:
    done = run("demo", "--once")
    said = done.stdout.decode()
    assert (done.returncode, done.stderr) == (0, b"")
    lines = said.splitlines()
    header = next(line for line in lines if "finding" in line)
    assert [word.strip() for word in header.strip("┃").split("┃")] == [
        "field",
        "finding",
        "presence",
        "code",
        "value",
    ]
    rows = [
        [cell.strip() for cell in line.strip("│").split("│")]
        for line in said.splitlines()
        if line.startswith("│")
    ]
    fourth = next(row for row in rows if row[0] == "heart.s4")
    assert fourth[1:4] == ["Fourth heart sound", "present", "SNOMED CT 4592006"]
    assert next(row for row in rows if row[0] == "vitals.hr")[4] == "78 /min"
    assert next(row for row in rows if row[0] == "palpation.thrill")[2] == "absent"
    assert "No issues found." in said
    assert "\x1b" not in said


def test_demo_stays_until_it_is_ended(tmp_path: Path) -> None:
    env = {**os.environ, "NO_COLOR": "1", "TMPDIR": str(tmp_path), "PYTHONUNBUFFERED": "1"}
    words = [sys.executable, "-m", "fhirgallop", "demo"]
    running = subprocess.Popen(words, stdout=subprocess.PIPE, stderr=subprocess.DEVNULL, text=True, env=env)
    assert running.stdout
    try:
        first = running.stdout.readline()
        base = next(word for word in first.split() if word.startswith("http://127.0.0.1:"))
        for line in running.stdout:
            if line.startswith("Ctrl-C"):
                break
        with httpx.Client(base_url=base, trust_env=False, timeout=30) as client:
            assert client.get("/health").json()["status"] == "up"
        assert list(tmp_path.glob("fhirgallop-demo-*/demo.sqlite3"))
        running.send_signal(signal.SIGINT)
        assert "ended" in running.stdout.read()
        assert running.wait(60) == 0
    finally:
        running.kill()
        running.stdout.close()
    assert list(tmp_path.iterdir()) == [], "what was stored goes with it"


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (["--host", "0.0.0.0"], "loopback"),
        (["--host", "192.0.2.7"], "loopback"),
        (["--port", "70000"], "FHIRGALLOP_PORT"),
        (["--maps", "nowhere"], "nowhere does not exist"),
        (["--maps", ".", "--database", "no address"], "not an address"),
        (["--maps", ".", "--database", "sqlite:////nowhere/at/all.sqlite3"], "cannot be opened"),
    ],
)
def test_serve_refuses_what_cannot_be_used(
    call: Any, monkeypatch: pytest.MonkeyPatch, tmp_path: Path, words: list[str], said: str
) -> None:
    monkeypatch.chdir(tmp_path)
    done = call("serve", *words)
    assert done.returncode == 3
    assert said in done.stderr
    assert list(tmp_path.iterdir()) == [], "what does not start leaves nothing"


@pytest.mark.parametrize("sent", [signal.SIGINT, signal.SIGTERM])
def test_serve_until_it_is_ended(root: Path, tmp_path: Path, run: Any, sent: signal.Signals) -> None:
    maps, database = root / "examples/informatician", f"sqlite:///{tmp_path / 'a.sqlite3'}"
    words = [
        sys.executable,
        "-m",
        "fhirgallop",
        "serve",
        "--port",
        "0",
        "--maps",
        maps,
        "--database",
        database,
    ]
    running = subprocess.Popen(words, stdout=subprocess.DEVNULL, stderr=subprocess.PIPE, text=True)
    assert running.stderr
    try:
        line = next(line for line in running.stderr if "http://127.0.0.1:" in line)
        base = next(word for word in line.split() if word.startswith("http://"))
        with httpx.Client(base_url=base, trust_env=False, timeout=30) as client:
            assert client.get("/health").status_code == 200
        port = base.rpartition(":")[2]
        taken = run("serve", "--port", port, "--maps", maps, "--database", "sqlite://")
        assert taken.returncode == 4
        assert f"port {port} of 127.0.0.1 cannot be used" in taken.stderr.decode()
        running.send_signal(sent)
        assert running.wait(60) == 0
    finally:
        running.kill()
        running.stderr.close()


def test_colour_only_for_a_terminal_that_wants_it(root: Path) -> None:
    """A pipe and NO_COLOR (no-color.org) mean: no escape sequence for colours."""
    words = [
        sys.executable, "-m", "fhirgallop",
        "map", "check", str(root / "examples/informatician/circor-2022.yaml"),
        "--with", str(root / "examples/ehr/fernwood-exam.csv"),
    ]  # fmt: skip
    env = {name: value for name, value in os.environ.items() if name not in ("NO_COLOR", "FORCE_COLOR")}
    piped = subprocess.run(words, capture_output=True, check=False, timeout=60, env=env)
    assert b"\x1b" not in piped.stdout + piped.stderr
    assert b"\x1b[3" not in _on_a_terminal(words, {**env, "NO_COLOR": "1", "TERM": "xterm-256color"})
    dumb = _on_a_terminal(words, {**env, "TERM": "dumb"})
    assert b"\x1b[3" not in dumb
    assert b"records" in dumb


def _on_a_terminal(words: list[str], env: dict[str, str]) -> bytes:
    """What a command shows on a terminal of its own."""
    ours, theirs = pty.openpty()
    running = subprocess.Popen(words, stdin=theirs, stdout=theirs, stderr=theirs, env=env)
    os.close(theirs)
    seen = bytearray()
    try:
        while part := os.read(ours, 65536):
            seen += part
    except OSError:  # the other end is closed: Linux says so with EIO
        pass
    finally:
        os.close(ours)
    running.wait(60)
    return bytes(seen)


def test_progress_is_shown_to_a_person_alone(root: Path, tmp_path: Path) -> None:
    record, template = (
        root / "examples/ehr/fernwood-exam.csv",
        root / "examples/informatician/fernwood-heart-form.yaml",
    )
    words = [
        sys.executable, "-m", "fhirgallop",
        "code", str(record), "--map", str(template), "--out", str(tmp_path / "out.json"),
    ]  # fmt: skip
    seen = _on_a_terminal(words, {**os.environ, "TERM": "xterm-256color"})
    assert b"1 coded" in seen
    piped = subprocess.run(words, capture_output=True, check=False, timeout=60)
    assert b"coding" not in piped.stderr
    assert piped.stderr.decode() == "1 examinations: 1 coded, 0 refused, 0 unreadable\n"
