"""The store: versions, failures that leave nothing half-written, sudden death, other databases."""

from __future__ import annotations

import random
import sqlite3
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path
from typing import Any

import pytest
from sqlalchemy import Engine, event, func, select, update

from fhirgallop.errors import SettingsError
from fhirgallop.storage.engine import open_database
from fhirgallop.storage.submissions import StorageError, Submissions
from fhirgallop.storage.tables import SCHEMA_VERSION, schema_version, submissions


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


def test_large_bundles_take_little_room_and_come_back_as_they_were(engine: Engine, submission: Any) -> None:
    store = Submissions(engine)
    texts = [
        b"",
        b"{}",
        b"x" * 511,
        b"x" * 512,
        b'{"a":1.20}' * 9000,
        b"\0z",
        b"\0zx" * 400,
        bytes(range(256)),
    ]
    for number, text in enumerate(texts):
        assert store.add(submission(f"urn:{number}", bundle=text))
        found = store.latest(f"urn:{number}", "R4", snomed=True)
        assert found
        assert found.bundle == text
    with engine.connect() as connection:
        kept = connection.scalars(select(func.length(submissions.c.bundle)).order_by(submissions.c.id)).all()
    assert kept[4] < 90_000 / 8
    assert kept[:3] == [0, 2, 511]


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
        store.add(submission("urn:large", bundle=random.Random(1).randbytes(400_000)))
    assert store.latest("urn:large", "R4", snomed=True) is None
    assert store.latest("urn:small", "R4", snomed=True) == submission("urn:small")
    assert store.add(submission("urn:next"))
    assert rows(engine) == 2
    engine.dispose()


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


def test_a_new_file_is_for_its_owner_alone(tmp_path: Path, submission: Any) -> None:
    engine = open_database(f"sqlite:///{tmp_path / 'store.sqlite3'}")
    assert Submissions(engine).add(submission())
    files = list(tmp_path.iterdir())
    assert {file.name for file in files} >= {"store.sqlite3", "store.sqlite3-wal"}
    assert {file.stat().st_mode & 0o777 for file in files} == {0o600}
    engine.dispose()


@pytest.mark.parametrize("durable", [True, False])
def test_postgres_waits_for_the_disk_if_wished(postgres: str, durable: bool) -> None:
    engine = open_database(postgres, durable=durable)
    with engine.connect() as connection:
        found = connection.exec_driver_sql("SHOW synchronous_commit").scalar()
    assert found == ("on" if durable else "off")
    engine.dispose()
