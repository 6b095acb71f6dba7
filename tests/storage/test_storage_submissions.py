"""The store: versions, failures that leave nothing half-written, sudden death, other databases."""

from __future__ import annotations

import hashlib
import os
import random
import signal
import sqlite3
import subprocess
import sys
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path
from typing import Any

import pytest
from sqlalchemy import Engine, event, func, select, update

from fhirgallop.errors import SettingsError
from fhirgallop.storage.engine import open_database
from fhirgallop.storage.submissions import StorageError, Submissions
from fhirgallop.storage.tables import SCHEMA_VERSION, schema_version, submissions

# A program that stores one examination after the other and says each number once it is stored.
WRITER = """
import hashlib, sys
from fhirgallop.storage.engine import open_database
from fhirgallop.storage.submissions import Submission, Submissions
store = Submissions(open_database(sys.argv[1]))
for number in range(int(sys.argv[2]), 10**9):
    bundle = str(number).encode() * 9000
    digest = hashlib.sha256(bundle).hexdigest()
    one = Submission(f"urn:{number}", "R4", True, 1, "m", "1", digest, "p", "2026-12-01T08:30:00Z", bundle)
    assert store.add(one)
    print(number, flush=True)
"""


def rows(engine: Engine) -> int:
    with engine.connect() as connection:
        return connection.scalar(select(func.count()).select_from(submissions)) or 0


def test_the_newest_version_counts_and_comes_back_whole(engine: Engine, submission: Any) -> None:
    store = Submissions(engine)
    first, second = submission(), submission(version=2, bundle=b"2", record_hash="1" * 64)
    assert store.latest("urn:a", "R4", snomed=True) is None
    assert store.add(first)
    assert store.latest("urn:a", "R4", snomed=True) == first
    assert store.add(second)
    assert store.latest("urn:a", "R4", snomed=True) == second
    assert store.latest("urn:b", "R4", snomed=True) is None


def test_each_way_of_writing_has_versions_of_its_own(engine: Engine, submission: Any) -> None:
    store = Submissions(engine)
    kinds = [("R4", True), ("R5", True), ("R4", False)]
    for edition, snomed in kinds:
        assert store.add(submission(edition=edition, snomed=snomed, bundle=edition.encode()))
    for edition, snomed in kinds:
        found = store.latest("urn:a", edition, snomed=snomed)
        assert found
        assert (found.edition, found.snomed) == (edition, snomed)


def test_of_two_who_store_the_same_version_one_wins(engine: Engine, submission: Any) -> None:
    store = Submissions(engine)
    offered = [submission(bundle=bytes([n])) for n in range(8)]
    with ThreadPoolExecutor(8) as pool:
        won = list(pool.map(store.add, offered))
    assert won.count(True) == 1
    assert store.latest("urn:a", "R4", snomed=True) == offered[won.index(True)]
    assert rows(engine) == 1


def test_a_full_disk_keeps_nothing_and_is_got_over(tmp_path: Path, submission: Any) -> None:
    """SQLite tells a page limit that is reached as it tells a full disk (SQLITE_FULL)."""
    engine = open_database(f"sqlite:///{tmp_path / 'full.sqlite3'}")

    def limit(connection: sqlite3.Connection, _: object) -> None:
        connection.execute("PRAGMA max_page_count=40")

    event.listen(engine, "connect", limit)
    engine.dispose()
    store = Submissions(engine)
    assert store.add(submission("urn:small"))
    with pytest.raises(StorageError, match=r"^OperationalError$"):
        store.add(submission("urn:large", bundle=b"x" * 400_000))
    assert store.latest("urn:large", "R4", snomed=True) is None
    assert store.latest("urn:small", "R4", snomed=True) == submission("urn:small")
    assert store.add(submission("urn:next"))
    assert rows(engine) == 2
    engine.dispose()


@pytest.mark.parametrize("seed", range(4))
def test_sudden_death_loses_nothing_that_was_said_to_be_stored(tmp_path: Path, seed: int) -> None:
    path = tmp_path / "killed.sqlite3"
    chance = random.Random(seed)
    said: list[int] = []
    for _ in range(2):
        writer = subprocess.Popen(
            [sys.executable, "-c", WRITER, f"sqlite:///{path}", str(len(said) + 1)],
            stdout=subprocess.PIPE,
            text=True,
        )
        assert writer.stdout
        said += [int(writer.stdout.readline()) for _ in range(chance.randrange(1, 40))]
        os.kill(writer.pid, signal.SIGKILL)
        said += [int(line) for line in writer.stdout.read().split()]
        writer.wait()
        writer.stdout.close()
        engine = open_database(f"sqlite:///{path}")
        with engine.connect() as connection:
            assert connection.exec_driver_sql("PRAGMA integrity_check").scalar() == "ok"
            kept = connection.execute(
                select(submissions.c.exam, submissions.c.record_hash, submissions.c.bundle)
            ).all()
        engine.dispose()
        assert all(hashlib.sha256(bundle).hexdigest() == digest for _, digest, bundle in kept)
        # the last one may be stored without the writer having had the time to say so
        assert {f"urn:{number}" for number in said} <= {row.exam for row in kept}
        assert len(said) <= len(kept) <= len(said) + 1
        said = [int(row.exam.removeprefix("urn:")) for row in kept]


def test_a_database_of_another_form_is_refused(tmp_path: Path) -> None:
    address = f"sqlite:///{tmp_path / 'old.sqlite3'}"
    engine = open_database(address)
    with engine.begin() as connection:
        connection.execute(update(schema_version).values(version=SCHEMA_VERSION + 1))
    engine.dispose()
    with pytest.raises(SettingsError, match=f"version {SCHEMA_VERSION + 1}"):
        open_database(address)


def test_a_database_that_cannot_be_opened_is_told(tmp_path: Path) -> None:
    (tmp_path / "text.sqlite3").write_text(
        "this is no database at all, but a text of some length\n" * 40, "utf-8"
    )
    for address in (
        f"sqlite:///{tmp_path / 'text.sqlite3'}",
        f"sqlite:///{tmp_path / 'no/such/folder/x.sqlite3'}",
    ):
        with pytest.raises(SettingsError, match="cannot be opened"):
            open_database(address)
    for address in ("sqlite://", "sqlite:///:memory:"):
        with pytest.raises(SettingsError, match="no file"):
            open_database(address)
    with pytest.raises(SettingsError, match="needs cx_Oracle, which is not installed"):
        open_database("oracle+cx_oracle://host/name")
    with pytest.raises(SettingsError, match="not an address"):
        open_database("nonsense")
    with pytest.raises(SettingsError, match="database"):
        open_database("nosuchdatabase://host/name")


@pytest.mark.parametrize("durable", [True, False])
def test_the_journal_survives_the_program_and_if_wished_the_power(tmp_path: Path, durable: bool) -> None:
    engine = open_database(f"sqlite:///{tmp_path / 'store.sqlite3'}", durable=durable)
    # 2 is FULL, 1 is NORMAL (sqlite.org/pragma.html#pragma_synchronous)
    pragmas = {
        "journal_mode": "wal",
        "synchronous": 2 if durable else 1,
        "foreign_keys": 1,
        "secure_delete": 1,
    }
    with engine.connect() as connection:
        for name, value in pragmas.items():
            assert connection.exec_driver_sql(f"PRAGMA {name}").scalar() == value
    engine.dispose()


@pytest.mark.parametrize("durable", [True, False])
def test_postgres_waits_for_the_disk_if_wished(postgres: str, durable: bool) -> None:
    engine = open_database(postgres, durable=durable)
    with engine.connect() as connection:
        found = connection.exec_driver_sql("SHOW synchronous_commit").scalar()
    assert found == ("on" if durable else "off")
    engine.dispose()
