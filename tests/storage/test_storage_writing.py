"""Several threads that write at once: together where it helps, and each with its own outcome."""

from __future__ import annotations

import threading
import time
from collections.abc import Iterator
from pathlib import Path

import pytest
from sqlalchemy import Connection, Engine, event, select, text
from sqlalchemy.exc import IntegrityError

from fhirgallop.storage.engine import open_database
from fhirgallop.storage.writing import Writer

_SECONDS = 20


@pytest.fixture
def engine(tmp_path: Path) -> Iterator[Engine]:
    """A database with a table of numbers, each at most once."""
    opened = open_database(f"sqlite:///{tmp_path / 'writing.sqlite3'}")
    with opened.begin() as connection:
        connection.execute(text("CREATE TABLE numbers (number INTEGER PRIMARY KEY)"))
    yield opened
    opened.dispose()


def _add(connection: Connection, number: int) -> None:
    connection.execute(text("INSERT INTO numbers VALUES (:number)"), {"number": number})


def _numbers(engine: Engine) -> list[int]:
    with engine.connect() as connection:
        return list(connection.scalars(select(text("number FROM numbers ORDER BY number"))))


def _at_once(engine: Engine, numbers: list[int]) -> tuple[list[str], int]:
    """Adds numbers by a thread each, all waiting for one that writes: the outcomes, and how many commits."""
    writer = Writer(engine)
    begun, go = threading.Event(), threading.Event()
    outcomes = ["" for _ in numbers]

    def slow(connection: Connection) -> None:
        begun.set()
        assert go.wait(_SECONDS)
        _add(connection, 0)

    def one(place: int) -> None:
        try:
            writer.keep(lambda connection: _add(connection, numbers[place]))
        except IntegrityError:
            outcomes[place] = "there already"
        else:
            outcomes[place] = "kept"

    first = threading.Thread(target=writer.keep, args=(slow,))
    first.start()
    assert begun.wait(_SECONDS)
    commits: list[Connection] = []
    event.listen(engine, "commit", commits.append)
    others = [threading.Thread(target=one, args=(place,)) for place in range(len(numbers))]
    for thread in others:
        thread.start()
    while len(writer._waiting) < len(numbers):
        assert first.is_alive()
        time.sleep(0.001)
    go.set()
    for thread in (first, *others):
        thread.join(_SECONDS)
    return outcomes, len(commits)


def test_who_waits_shares_the_next_transaction(engine: Engine) -> None:
    outcomes, commits = _at_once(engine, [3, 1, 2])
    assert outcomes == ["kept"] * 3
    assert _numbers(engine) == [0, 1, 2, 3]
    assert commits == 2, "one for the first, one for the three who waited"


def test_who_fails_takes_nobody_along(engine: Engine) -> None:
    outcomes, _ = _at_once(engine, [1, 2, 0, 3])
    assert outcomes == ["kept", "kept", "there already", "kept"]
    assert _numbers(engine) == [0, 1, 2, 3]


def test_a_long_queue_is_kept_in_several_transactions(engine: Engine) -> None:
    outcomes, commits = _at_once(engine, list(range(1, 41)))
    assert outcomes == ["kept"] * 40
    assert _numbers(engine) == list(range(41))
    assert commits == 4, "one for the first, and at most 16 in each of the others"


def test_half_of_an_act_is_nothing(engine: Engine) -> None:
    def half(connection: Connection) -> None:
        _add(connection, 7)
        raise KeyError("broke")

    with pytest.raises(KeyError):
        Writer(engine).keep(half)
    assert _numbers(engine) == []
