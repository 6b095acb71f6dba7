"""Outboxes on both databases, and a record system to deliver to as a process of its own."""

from __future__ import annotations

import sqlite3
import subprocess
import sys
from collections.abc import Callable, Iterator
from contextlib import closing
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import pytest
from sqlalchemy import Engine

from fhirgallop.storage.engine import open_database
from fhirgallop.storage.outbox import RECORD_SYSTEM, enqueue
from fhirgallop.storage.submissions import Submission, Submissions


@pytest.fixture(params=["sqlite", "postgresql"])
def engine(request: pytest.FixtureRequest, tmp_path: Path) -> Iterator[Engine]:
    """An empty database of each kind."""
    sqlite = request.param == "sqlite"
    address = f"sqlite:///{tmp_path / 'd.sqlite3'}" if sqlite else request.getfixturevalue("postgres")
    opened = open_database(address)
    yield opened
    opened.dispose()


@pytest.fixture
def sqlite_engine(tmp_path: Path) -> Iterator[Engine]:
    """An empty SQLite database."""
    opened = open_database(f"sqlite:///{tmp_path / 'd.sqlite3'}")
    yield opened
    opened.dispose()


@pytest.fixture
def put() -> Callable[..., None]:
    """Stores an examination with its delivery: `put(engine, "a", version=2, patient="p")`."""

    def store(
        engine: Engine, exam: str, *, version: int = 1, patient: str = "p", at: int = 0, bundle: bytes = b""
    ) -> None:
        entry = b'{"resourceType":"Bundle","type":"transaction","entry":[{"fullUrl":"urn:%s"}]}'
        row = Submission(
            exam, "R4", True, version, "m", "1", f"{version:064}", patient, "2026-12-01T08:30:00Z",
            bundle or entry % exam.encode(),
        )  # fmt: skip
        stored = Submissions(engine).add(
            row,
            lambda connection, number: enqueue(
                connection, destination=RECORD_SYSTEM, submission=number, exam=exam, patient=patient, at=at
            ),
        )
        assert stored

    return store


@dataclass
class Peer:
    """The receiver's process; may be killed and started again on the same port."""

    folder: Path
    words: tuple[str, ...] = ()
    port: int = 0
    process: subprocess.Popen[str] | None = field(default=None)

    @property
    def file(self) -> Path:
        return self.folder / "receiver.sqlite3"

    @property
    def base(self) -> str:
        return f"http://127.0.0.1:{self.port}/fhir"

    def start(self) -> None:
        script = Path(__file__).parent.parent / "peers" / "receiver.py"
        words = [sys.executable, str(script), str(self.file), "--port", str(self.port), *self.words]
        self.process = subprocess.Popen(words, stdout=subprocess.PIPE, text=True)
        assert self.process.stdout
        self.port = int(self.process.stdout.readline())

    def kill(self) -> None:
        if self.process:
            self.process.kill()
            self.process.wait()
            assert self.process.stdout
            self.process.stdout.close()
            self.process = None

    def rows(self, query: str) -> list[tuple[Any, ...]]:
        """What a query finds in what it keeps."""
        with closing(sqlite3.connect(self.file, timeout=30)) as database:
            return database.execute(query).fetchall()


@pytest.fixture
def receiver(tmp_path: Path) -> Iterator[Callable[..., Peer]]:
    """Starts a record system: `receiver("--faults", "0.2")`."""
    started: list[Peer] = []

    def start(*words: str) -> Peer:
        peer = Peer(tmp_path, words)
        peer.start()
        started.append(peer)
        return peer

    yield start
    for peer in started:
        peer.kill()
