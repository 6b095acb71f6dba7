"""Databases of an earlier form: carried forward whole or not at all, refused until then."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import threading
from collections import Counter
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from typing import Any

import pytest
from alembic.autogenerate import compare_metadata
from alembic.runtime.migration import MigrationContext
from sqlalchemy import Connection, Engine, func, insert, inspect, select, update

from fhirgallop.cli.database import _keep_resources
from fhirgallop.errors import SettingsError
from fhirgallop.storage.engine import connect, open_database, version_of
from fhirgallop.storage.keys import patient_key
from fhirgallop.storage.migrations.stored import Stored
from fhirgallop.storage.submissions import Submissions
from fhirgallop.storage.tables import (
    SCHEMA_VERSION,
    hook_cards,
    hook_feedback,
    hook_instances,
    hook_memories,
    metadata,
    resources,
    schema_version,
    submissions,
)
from fhirgallop.storage.upgrade import upgrade

Reach = Callable[[str], Engine]

# A program that begins to carry a database forward, says so in the middle of it, and waits to be killed.
DYING = """
import sys, time
from fhirgallop.storage.engine import connect
from fhirgallop.storage.upgrade import upgrade
def keep(connection, stored):
    print("in the middle", flush=True)
    time.sleep(60)
upgrade(connect(sys.argv[1]), keep)
"""


def differences(engine: Engine) -> list[Any]:
    """What is not as `tables.py` says, types, defaults, indexes and keys included."""
    with engine.connect() as connection:
        options = {"compare_type": True, "compare_server_default": True}
        found = compare_metadata(MigrationContext.configure(connection, opts=options), metadata)
        made = inspect(connection)
        for table in metadata.sorted_tables:
            there = {
                (*one["constrained_columns"], one["options"].get("ondelete"))
                for one in made.get_foreign_keys(table.name)
            }
            assert there == {(one.parent.name, one.ondelete) for one in table.foreign_keys}
            assert made.get_pk_constraint(table.name)["constrained_columns"] == [
                column.name for column in table.primary_key
            ]
    return list(found)


def test_a_new_database_has_todays_tables(address: str, reach: Reach) -> None:
    open_database(address).dispose()
    engine = reach(address)
    assert version_of(engine) == SCHEMA_VERSION
    assert differences(engine) == []


def test_an_old_database_is_carried_forward_whole(of_version_1: str, reach: Reach, bundle: bytes) -> None:
    engine = reach(of_version_1)
    assert upgrade(engine, _keep_resources) == 1
    assert version_of(engine) == SCHEMA_VERSION
    assert differences(engine) == []
    whose = patient_key("https://fernwood.example/patients", "F-20417")
    with engine.connect() as connection:
        kept = connection.execute(select(submissions).order_by(submissions.c.id)).all()
        assert [(row.exam, row.version, row.bundle) for row in kept] == [
            ("urn:uuid:1", 1, bundle), ("urn:uuid:1", 2, bundle), ("urn:uuid:2", 1, bundle),
        ]  # fmt: skip
        assert {row.patient for row in kept} == {whose}
        coded = connection.execute(
            select(resources.c.type, resources.c.patient, resources.c.submission)
        ).all()
        assert connection.scalar(select(hook_memories.c.version)) == 3
        for table in (hook_instances, hook_cards, hook_feedback):
            assert connection.scalar(select(func.count()).select_from(table)) == 1
    # the same examination three times: one version of each resource, from the first
    counts = Counter(row.type for row in coded)
    assert counts["DiagnosticReport"] == 1
    assert counts["Observation"] > 10
    assert {row.patient for row in coded} == {whose}
    assert {row.submission for row in coded} == {kept[0].id}
    # numbers go on, and what is deleted takes along what belongs to it
    store = Submissions(engine)
    before = store.latest("urn:uuid:2", "R4", snomed=True)
    assert before
    assert store.add(
        type(before)(**{n: getattr(before, n) for n in before.__slots__} | {"version": 2, "id": 0})
    )
    with engine.begin() as connection:
        connection.execute(submissions.delete())
        assert connection.scalar(select(func.count()).select_from(resources)) == 0
    open_database(of_version_1).dispose()


def test_an_old_database_is_refused_until_then(of_version_1: str, reach: Reach) -> None:
    with pytest.raises(SettingsError, match=r"(?s)version 1.*fhirgallop database upgrade"):
        open_database(of_version_1)
    engine = reach(of_version_1)
    assert upgrade(engine, _keep_resources) == 1
    assert upgrade(engine, _keep_resources) == SCHEMA_VERSION  # nothing to do is no mistake
    with engine.begin() as connection:
        connection.execute(update(schema_version).values(version=SCHEMA_VERSION + 1))
    for use in (lambda: upgrade(engine, _keep_resources), lambda: open_database(of_version_1)):
        with pytest.raises(SettingsError, match=f"version {SCHEMA_VERSION + 1}.*newer program"):
            use()


def test_an_upgrade_that_fails_changes_nothing(of_version_1: str, reach: Reach) -> None:
    def fails(connection: Connection, stored: Stored) -> None:
        _keep_resources(connection, stored)
        connection.execute(insert(schema_version).values(version=1))  # there already

    engine = reach(of_version_1)
    with pytest.raises(SettingsError, match="as it was"):
        upgrade(engine, fails)
    assert version_of(engine) == 1
    with engine.connect() as connection:
        assert not inspect(connection).has_table("resources")
        assert "patient" not in {column["name"] for column in inspect(connection).get_columns("submissions")}
    assert upgrade(engine, _keep_resources) == 1


def test_death_in_the_middle_leaves_the_old_form(of_version_1: str, reach: Reach) -> None:
    dying = subprocess.Popen([sys.executable, "-c", DYING, of_version_1], stdout=subprocess.PIPE, text=True)
    assert dying.stdout
    assert dying.stdout.readline() == "in the middle\n"
    os.kill(dying.pid, signal.SIGKILL)
    dying.wait()
    dying.stdout.close()
    engine = reach(of_version_1)
    assert version_of(engine) == 1
    assert upgrade(engine, _keep_resources) == 1
    assert differences(engine) == []


def test_of_two_who_upgrade_at_once_one_waits(of_version_1: str, reach: Reach) -> None:
    together = threading.Barrier(2)

    def go(_: int) -> int:
        engine = connect(of_version_1)
        together.wait()
        found = upgrade(engine, _keep_resources)
        engine.dispose()
        return found

    with ThreadPoolExecutor(2) as pool:
        assert sorted(pool.map(go, range(2))) == [1, SCHEMA_VERSION]


def test_of_many_who_open_a_new_database_one_makes_the_tables(address: str, reach: Reach) -> None:
    together = threading.Barrier(6)

    def go(_: int) -> None:
        together.wait()
        open_database(address).dispose()

    with ThreadPoolExecutor(6) as pool:
        list(pool.map(go, range(6)))
    open_database(address).dispose()
    engine = reach(address)
    with engine.connect() as connection:
        assert connection.scalars(select(schema_version.c.version)).all() == [SCHEMA_VERSION]


def test_tables_of_another_program_are_left_alone(address: str, reach: Reach) -> None:
    engine = reach(address)
    with engine.begin() as connection:
        connection.exec_driver_sql("CREATE TABLE sessions (name VARCHAR(10))")
    with pytest.raises(SettingsError, match=r"table sessions .*database of its own"):
        open_database(address)
    with engine.connect() as connection:
        assert inspect(connection).get_table_names() == ["sessions"]


def test_an_empty_database_is_not_upgraded(address: str, reach: Reach) -> None:
    engine = reach(address)
    with pytest.raises(SettingsError, match="empty"):
        upgrade(engine, _keep_resources)


def test_postgres_is_found_by_its_plain_name(postgres: str) -> None:
    engine = open_database(postgres.replace("postgresql+psycopg:", "postgresql:"))
    assert engine.dialect.driver == "psycopg"
    engine.dispose()
