"""Fixtures that every test may use, and the rule that nothing is skipped in CI."""

from __future__ import annotations

import os
import subprocess
import sys
from collections.abc import Callable
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path

import pytest

from fhirgallop.cli.main import main

ROOT = Path(__file__).resolve().parent.parent


@dataclass(frozen=True)
class Done:
    """What a call left behind."""

    code: int
    out: bytes
    err: str


@pytest.fixture(scope="session")
def root() -> Path:
    """Top folder of the checkout."""
    return ROOT


@pytest.fixture(scope="session")
def shared() -> Path:
    """Folder beside the checkout with evidence and real data; tests skip where it is absent."""
    folder = ROOT.parent / "shared"
    if not folder.is_dir():
        pytest.skip("the folder with evidence and real data does not lie beside this checkout")
    return folder


@pytest.fixture(scope="session")
def moment() -> datetime:
    """A fixed moment of conversion, so that output can be compared byte for byte."""
    return datetime(2026, 12, 1, 8, 30, tzinfo=UTC)


@pytest.fixture
def call(monkeypatch: pytest.MonkeyPatch, capsysbinary: pytest.CaptureFixture[bytes]) -> Callable[..., Done]:
    """Calls the command line in this process, which is quicker than starting another."""

    def start(*words: str | Path) -> Done:
        monkeypatch.setattr(sys, "argv", ["fhirgallop", *map(str, words)])
        monkeypatch.setattr("fhirgallop.cli.main.signal.signal", lambda *_: None)
        with pytest.raises(SystemExit) as ended:
            main()
        captured = capsysbinary.readouterr()
        return Done(int(ended.value.code or 0), captured.out, captured.err.decode())

    return start


@pytest.fixture(scope="session")
def run() -> Callable[..., subprocess.CompletedProcess[str]]:
    """Runs the command line in a process of its own, with its output in pipes."""

    def start(*words: str | Path, **env: str) -> subprocess.CompletedProcess[str]:
        return subprocess.run(
            [sys.executable, "-W", "error", "-m", "fhirgallop", *map(str, words)],
            capture_output=True,
            check=False,
            text=True,
            timeout=120,
            env={**os.environ, **env},
        )

    return start


def pytest_terminal_summary(terminalreporter: pytest.TerminalReporter) -> None:
    """Says loudly what was skipped where nothing may be."""
    if os.environ.get("CI") and terminalreporter.stats.get("skipped"):
        terminalreporter.write_line("CI: no test may be skipped for a missing part", red=True)


def pytest_sessionfinish(session: pytest.Session) -> None:
    """In CI a skipped test is a failure: something that should be installed is missing."""
    reporter = session.config.pluginmanager.get_plugin("terminalreporter")
    if os.environ.get("CI") and reporter and reporter.stats.get("skipped") and session.exitstatus == 0:
        session.exitstatus = pytest.ExitCode.TESTS_FAILED
