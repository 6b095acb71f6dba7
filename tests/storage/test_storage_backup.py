"""Backups: one moment's state, restored whole or not at all, from one kind of database to the other."""

from __future__ import annotations

import gzip
import json
import threading
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any

import pytest
from sqlalchemy import Engine, insert, select, update

from fhirgallop.errors import BackupError
from fhirgallop.storage.backup import check_backup, count, read_backup, write_backup
from fhirgallop.storage.engine import open_database, version_of
from fhirgallop.storage.submissions import Submission, Submissions
from fhirgallop.storage.tables import metadata, schema_version, submissions

MADE = "2026-12-01T08:30:00Z"
Reach = Callable[[str], Engine]


def nothing(_table: str, _number: int) -> None:
    """Nobody looks on."""


def value(column: Any, number: int) -> Any:
    """A value of the column's type that is another for each number, and awkward where it can be."""
    if column.foreign_keys:
        (key,) = column.foreign_keys
        return value(key.column, number)
    kind = column.type.python_type
    if kind is bytes:
        return bytes([number, 0, 255, 10]) * number
    if kind is bool:
        return number % 2 == 0
    if kind is int:
        return number if column.primary_key else 2**40 + number if "BIGINT" in str(column.type) else number
    return f'{number}"\n\u2028é|\\'[: column.type.length]


def fill(engine: Engine, rows: int) -> None:
    """Rows in every table, more of them where an id says so."""
    with engine.begin() as connection:
        for table in metadata.sorted_tables:
            if table is schema_version:
                continue
            columns = [column for column in table.columns if column is not table.autoincrement_column]
            for number in range(1, rows + 1):
                kept = {column.name: value(column, number) for column in columns}
                connection.execute(insert(table).values(**kept))


def contents(engine: Engine) -> Mapping[str, list[Any]]:
    """Every row of every table."""
    with engine.connect() as connection:
        return {
            table.name: [tuple(row) for row in connection.execute(select(table).order_by(*table.primary_key))]
            for table in metadata.sorted_tables
        }


@pytest.fixture
def saved(engine: Engine, tmp_path: Path) -> Path:
    """A backup of a database that has rows in every table."""
    fill(engine, 5)
    path = tmp_path / "backup"
    with path.open("wb") as file:
        write_backup(engine, file, made=MADE, progress=nothing)
    return path


def test_a_backup_gives_the_same_in_the_other_kind_of_database(
    engine: Engine, saved: Path, other_address: str, reach: Reach, submission: Any
) -> None:
    other = reach(other_address)
    told: dict[str, int] = {}
    restored = read_backup(other, saved, progress=lambda table, number: told.update({table: number}))
    assert contents(other) == contents(engine)
    assert restored.made == MADE
    assert dict(restored.rows) == told == dict(count(other)) == dict.fromkeys(count(engine), 5)
    # numbers go on after those that were filled in
    assert Submissions(other).add(submission("urn:new"))
    with other.connect() as connection:
        assert connection.scalars(select(submissions.c.id).order_by(submissions.c.id)).all() == [*range(1, 7)]
    open_database(other_address).dispose()
    # and a backup of it is the same but for nothing
    again = saved.with_name("again")
    with again.open("wb") as file:
        write_backup(engine, file, made=MADE, progress=nothing)
    assert again.read_bytes() == saved.read_bytes()


def test_only_an_empty_database_is_filled(engine: Engine, saved: Path) -> None:
    before = contents(engine)
    with pytest.raises(BackupError, match="not empty"):
        read_backup(engine, saved, progress=nothing)
    assert contents(engine) == before


def test_a_backup_that_breaks_in_the_middle_leaves_the_database_empty(
    saved: Path, other_address: str, reach: Reach
) -> None:
    other = reach(other_address)
    open_database(other_address).dispose()

    class StoppedError(Exception):
        """Somebody pulls the plug."""

    def stop(table: str, _number: int) -> None:
        if table == "resources":
            raise StoppedError

    with pytest.raises(StoppedError):
        read_backup(other, saved, progress=stop)
    assert set(count(other).values()) == {0}
    read_backup(other, saved, progress=nothing)


def test_a_damaged_backup_is_refused(saved: Path, other_address: str, reach: Reach) -> None:
    text = gzip.decompress(saved.read_bytes())
    lines = text.splitlines(keepends=True)
    newer = json.dumps({**json.loads(lines[0]), "tables": 99}).encode() + b"\n"
    broken: dict[str, bytes] = {
        "cut off or damaged": saved.read_bytes()[:-200],
        "checksum is wrong": gzip.compress(text.replace(b'"submissions"', b'"submissiont"', 1)),
        r"\(its checksum": gzip.compress(b"".join(lines[:2] + lines[3:])),
        "cut off; use another": gzip.compress(b"".join(lines[:-1])),
        "no backup of": gzip.compress(b'{"resourceType":"Bundle"}\n'),
        "no backup, or": b"this is a text\n" * 20,
        "version 99": gzip.compress(newer + b"".join(lines[1:])),
    }
    path = saved.with_name("broken")
    other = reach(other_address)
    for said, content in broken.items():
        path.write_bytes(content)
        for use in (lambda: check_backup(path), lambda: read_backup(other, path, progress=nothing)):
            with pytest.raises(BackupError, match=said):
                use()
        assert version_of(other) is None  # it was left as it was: empty


def test_a_backup_is_one_moments_state_while_others_write(
    engine: Engine, tmp_path: Path, submission: Callable[..., Submission], reach: Reach
) -> None:
    """Two rows that always change together are never seen apart; the writer is not held up."""
    store = Submissions(engine)
    assert store.add(submission("urn:a", record_hash="0"))
    assert store.add(submission("urn:b", record_hash="0"))
    for number in range(600):
        assert store.add(submission(f"urn:{number:04}"))
    stop, changed = threading.Event(), [0]

    def change() -> None:
        while not stop.is_set():
            changed[0] += 1
            with engine.begin() as connection:
                for exam in ("urn:a", "urn:b"):
                    same = submissions.c.exam == exam
                    connection.execute(update(submissions).where(same).values(record_hash=str(changed[0])))

    def wait(_table: str, number: int) -> None:
        seen = changed[0]
        while number == 200 and changed[0] < seen + 5 and writer.is_alive():
            stop.wait(0.01)

    path = tmp_path / "backup"
    writer = threading.Thread(target=change)
    writer.start()
    try:
        with path.open("wb") as file:
            write_backup(engine, file, made=MADE, progress=wait)
    finally:
        stop.set()
        writer.join()
    assert changed[0] > 5
    other = reach(f"sqlite:///{tmp_path / 'restored.sqlite3'}")
    read_backup(other, path, progress=nothing)
    with other.connect() as connection:
        pair = connection.scalars(
            select(submissions.c.record_hash).where(submissions.c.exam.in_(["urn:a", "urn:b"]))
        ).all()
    assert len(set(pair)) == 1
    assert count(other)["submissions"] == 602
