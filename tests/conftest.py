"""Fixtures that every test may use, and the rule that nothing is skipped in CI."""

from __future__ import annotations

import logging
import os
import shutil
import signal
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import pytest

from fhirgallop.cli.main import main

ROOT = Path(__file__).resolve().parent.parent


@dataclass(frozen=True)
class Done:
    """What a call left behind."""

    code: int
    out: bytes
    err: str


@pytest.fixture(autouse=True)
def logging_as_before() -> Iterator[None]:
    """What a test lets log, and where to, is its own affair."""
    names = (None, "fhirgallop", "fhirgallop.service", "uvicorn", "uvicorn.error", "alembic")
    before = [(logger, logger.level, logger.handlers[:]) for logger in map(logging.getLogger, names)]
    yield
    for logger, level, handlers in before:
        logger.setLevel(level)
        for handler in logger.handlers[:]:
            if handler not in handlers and type(handler) is logging.StreamHandler:
                logger.removeHandler(handler)


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


@dataclass
class PostgresServer:
    """A PostgreSQL server of the tests' own, reachable through a socket in its folder alone.

    What it keeps survives any death of its own, but not of the machine: it never waits for the disk.
    """

    programs: Path
    folder: Path
    running: subprocess.Popen[bytes] | None = None
    made: int = field(default=0)

    def address(self, database: str) -> str:
        """Where a database is found."""
        return f"postgresql+psycopg://tester@/{database}?host={self.folder}"

    def start(self) -> None:
        """Starts it and waits until it answers."""
        options = {
            "listen_addresses": "", "unix_socket_directories": str(self.folder), "fsync": "off",
            "full_page_writes": "off", "max_connections": "60",
        }  # fmt: skip
        words = [word for name, value in options.items() for word in ("-c", f"{name}={value}")]
        with (self.folder / "log").open("ab") as log:
            self.running = subprocess.Popen(
                [self.programs / "postgres", "-D", self.folder / "data", *words],
                stdout=log, stderr=log, cwd=self.folder, **_unprivileged(),
            )  # fmt: skip
        self._do("pg_isready", "--quiet", "--timeout=30", "--host", self.folder, again=300)

    def stop(self, how: signal.Signals = signal.SIGINT) -> None:
        """Ends it: SIGINT drops every connection and ends well, SIGQUIT is as a crash."""
        if self.running:
            self.running.send_signal(how)
            self.running.wait(30)
            self.running = None

    def fresh(self) -> str:
        """The address of a new, empty database."""
        self.made += 1
        name = f"test{self.made}"
        self._do("createdb", "--host", self.folder, "--username", "tester", name)
        return self.address(name)

    def drop(self, address: str) -> None:
        """Removes such a database, whoever is still connected."""
        name = address.partition("@/")[2].partition("?")[0]
        self._do("dropdb", "--force", "--host", self.folder, "--username", "tester", name)

    def _do(self, program: str, *words: str | Path, again: int = 0) -> None:
        for left in range(again, -1, -1):
            done = subprocess.run([self.programs / program, *words], capture_output=True, check=False)
            if done.returncode == 0:
                return
            if left:
                time.sleep(0.05)
        raise RuntimeError(f"{program}: {done.stderr.decode()} {(self.folder / 'log').read_text()[-2000:]}")


def _unprivileged() -> dict[str, Any]:
    """PostgreSQL refuses to run as root."""
    return {"user": "nobody", "group": "nogroup", "extra_groups": []} if os.geteuid() == 0 else {}


@pytest.fixture(scope="session")
def postgres_server() -> Iterator[PostgresServer]:
    """A PostgreSQL server for this run, in a folder of its own."""
    found = shutil.which("postgres")
    programs = [Path(found).resolve().parent] if found else sorted(Path("/usr/lib/postgresql").glob("*/bin"))
    if not programs:
        pytest.skip("PostgreSQL's server programs are not installed on this machine")
    # the path of a socket may be 107 bytes long, which the folders of tests may exceed
    with tempfile.TemporaryDirectory(prefix="pg-", ignore_cleanup_errors=True) as name:
        folder = Path(name)
        if os.geteuid() == 0:
            shutil.chown(folder, "nobody", "nogroup")
        words = ["--pgdata", folder / "data", "--username=tester", "--auth=trust", "--no-sync",
                 "--encoding=UTF8", "--locale=C"]  # fmt: skip
        subprocess.run(
            [programs[-1] / "initdb", *words], check=True, capture_output=True, cwd=folder, **_unprivileged()
        )
        server = PostgresServer(programs[-1], folder)
        try:
            server.start()
            yield server
        finally:
            server.stop()


@pytest.fixture
def postgres(postgres_server: PostgresServer) -> Iterator[str]:
    """The address of an empty PostgreSQL database of this test's own."""
    address = postgres_server.fresh()
    yield address
    if postgres_server.running:
        postgres_server.drop(address)


def pytest_terminal_summary(terminalreporter: pytest.TerminalReporter) -> None:
    """Says loudly what was skipped where nothing may be."""
    if os.environ.get("CI") and terminalreporter.stats.get("skipped"):
        terminalreporter.write_line("CI: no test may be skipped for a missing part", red=True)


def pytest_sessionfinish(session: pytest.Session) -> None:
    """In CI a skipped test is a failure: something that should be installed is missing."""
    reporter = session.config.pluginmanager.get_plugin("terminalreporter")
    if os.environ.get("CI") and reporter and reporter.stats.get("skipped") and session.exitstatus == 0:
        session.exitstatus = pytest.ExitCode.TESTS_FAILED
