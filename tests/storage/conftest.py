"""Databases of both kinds, new ones and such as the first released version made them."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from pathlib import Path

import pytest
from sqlalchemy import Column, Connection, Engine, MetaData, Table, create_engine, insert

from fhirgallop.api import process
from fhirgallop.codes import fhirjson
from fhirgallop.storage.engine import connect, open_database
from fhirgallop.storage.submissions import Submission

KINDS = ("sqlite", "postgresql")


@pytest.fixture(params=KINDS)
def address(request: pytest.FixtureRequest, tmp_path: Path) -> str:
    """Where an empty database is; each test runs on both kinds."""
    if request.param == "sqlite":
        return f"sqlite:///{tmp_path / 'store.sqlite3'}"
    return str(request.getfixturevalue("postgres"))


@pytest.fixture
def other_address(address: str, request: pytest.FixtureRequest, tmp_path: Path) -> str:
    """An empty database of the other kind."""
    if address.startswith("sqlite"):
        return str(request.getfixturevalue("postgres"))
    return f"sqlite:///{tmp_path / 'other.sqlite3'}"


@pytest.fixture
def reach() -> Iterator[Callable[[str], Engine]]:
    """A database as it is: `reach(address)`; closed when the test is over, however it ends."""
    opened: list[Engine] = []

    def make(address: str) -> Engine:
        opened.append(connect(address))
        return opened[-1]

    yield make
    for one in opened:
        one.dispose()


@pytest.fixture
def engine(address: str) -> Iterator[Engine]:
    """A database with today's tables."""
    opened = open_database(address)
    yield opened
    opened.dispose()


@pytest.fixture(scope="session")
def submission() -> Callable[..., Submission]:
    """One version of an examination: `submission("urn:a", 2, bundle=b"...")`."""

    def make(exam: str = "urn:a", version: int = 1, **other: object) -> Submission:
        values: dict[str, object] = {
            "edition": "R4", "snomed": True, "map_name": "m", "map_version": "1", "record_hash": "0" * 64,
            "patient": "p" * 64, "received": "2026-12-01T08:30:00Z", "bundle": b'{"value":1.20}', **other,
        }  # fmt: skip
        return Submission(exam=exam, version=version, **values)  # type: ignore[arg-type]

    return make


@pytest.fixture(scope="session")
def bundle(root: Path) -> bytes:
    """The Bundle of the Fernwood examination."""
    record = (root / "examples/ehr/fernwood-exam.json").read_bytes()
    result = process(record, root / "examples/informatician/fernwood-heart-form.yaml")
    assert result.bundle
    return fhirjson.write(result.bundle)


@pytest.fixture
def of_version_1(address: str, root: Path, bundle: bytes) -> str:
    """The address of a database with the tables and rows of the first released version."""
    kind = "sqlite" if address.startswith("sqlite") else "postgresql"
    script = (root / f"tests/cases/storage/version-1.{kind}.sql").read_text("utf-8")
    opened = create_engine(address)
    received = "2026-03-14T09:30:00Z"
    with opened.begin() as connection:
        for statement in script.split(";\n"):
            if statement.strip():
                connection.exec_driver_sql(statement)
        connection.exec_driver_sql("INSERT INTO schema_version VALUES (1)")
        for exam, version in (("urn:uuid:1", 1), ("urn:uuid:1", 2), ("urn:uuid:2", 1)):
            values = {
                "exam": exam, "edition": "R4", "snomed": True, "version": version, "map_name": "m",
                "map_version": "1", "record_hash": "0" * 64, "received": received, "bundle": bundle,
            }  # fmt: skip
            _row(connection, "submissions", **values)
        _row(connection, "hook_memories", patient="ab", version=3, memory=b"{}")
        _row(connection, "hook_instances", instance="cd", patient="ab", memory=b"{}")
        card = {"card": "ef", "service": "s", "patient": "ab", "encounter": "gh", "shown": b"{}"}
        _row(connection, "hook_cards", **card, at=received)
        feedback = {
            "key": "k", "service": "s", "card": "ef", "matched": True, "outcome": "accepted",
            "suggestions": b"[]", "reason": "", "reason_system": "", "comment": "", "at": "2026",
        }  # fmt: skip
        _row(connection, "hook_feedback", **feedback, received=received)
    opened.dispose()
    return address


def _row(connection: Connection, name: str, **values: object) -> None:
    columns = [Column(key, quote=True) for key in values]
    connection.execute(insert(Table(name, MetaData(), *columns)).values(**values))
