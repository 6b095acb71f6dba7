"""Full disks, restarts, cut connections and sudden death: told plainly, got over, nothing half-written."""

from __future__ import annotations

import os
import random
import resource
import signal
import subprocess
import sys
import threading
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import pytest
from sqlalchemy import Connection, Engine, func, select

from fhirgallop.storage import outbox as line
from fhirgallop.storage.engine import connect, open_database
from fhirgallop.storage.resources import NewVersion, add_versions
from fhirgallop.storage.submissions import StorageError, Submission, Submissions
from fhirgallop.storage.tables import outbox, resources, submissions

# A program that keeps one examination after the other, each with a resource and a delivery, and says each
# number once it is kept.
WRITER = """
import sys
from fhirgallop.storage import outbox
from fhirgallop.storage.engine import connect, open_database
from fhirgallop.storage.resources import NewVersion, add_versions
from fhirgallop.storage.submissions import StorageError, Submission, Submissions
store = Submissions(open_database(sys.argv[1]))
for number in range(int(sys.argv[2]), int(sys.argv[3])):
    exam = f"urn:{number}"
    one = Submission(exam, "R4", True, 1, "m", "1", "h", "p", "2026-12-01T08:30:00Z", b"x" * 20000)
    new = NewVersion("R4", "Observation", str(number), "p", "", "", None, None, b"y" * 20000)
    def also(connection, row):
        add_versions(connection, [new], at=1, submission=row)
        outbox.enqueue(connection, destination="d", submission=row, exam=exam, patient="p", at=1)
    try:
        assert store.add(one, also)
    except StorageError as error:
        print(error, flush=True)
        break
    print(number, flush=True)
"""


RESOURCE = b"y" * 20000


def kept(engine: Engine) -> set[str]:
    """The examinations that are there, after making sure that each is whole."""
    with engine.connect() as connection:
        if engine.dialect.name == "sqlite":
            assert connection.exec_driver_sql("PRAGMA integrity_check").scalar() == "ok"
        rows = set(connection.scalars(select(submissions.c.id)))
        assert sorted(connection.scalars(select(resources.c.submission))) == sorted(rows)
        assert set(connection.scalars(select(resources.c.body))) <= {RESOURCE}
        assert sorted(connection.scalars(select(outbox.c.submission))) == sorted(rows)
        return set(connection.scalars(select(submissions.c.exam)))


def along(exam: str) -> Callable[[Connection, int], None]:
    """A resource and a delivery to keep with an examination."""
    new = NewVersion("R4", "Observation", exam, "p", "", "", None, None, RESOURCE)

    def also(connection: Connection, row: int) -> None:
        add_versions(connection, [new], at=1, submission=row)
        line.enqueue(connection, destination="d", submission=row, exam=exam, patient="p", at=1)

    return also


@pytest.mark.parametrize("seed", range(2))
def test_sudden_death_leaves_whole_examinations_and_all_that_were_told(address: str, seed: int) -> None:
    chance = random.Random(seed)
    told: set[str] = set()
    for start in (0, 10_000):
        writer = subprocess.Popen(
            [sys.executable, "-c", WRITER, address, str(start), "99999"], stdout=subprocess.PIPE, text=True
        )
        assert writer.stdout
        told |= {f"urn:{int(writer.stdout.readline())}" for _ in range(chance.randrange(1, 60))}
        os.kill(writer.pid, signal.SIGKILL)
        told |= {f"urn:{int(number)}" for number in writer.stdout.read().split()}
        writer.wait()
        writer.stdout.close()
        engine = open_database(address)
        found = kept(engine)
        assert told <= found
        assert len(found) <= len(told) + 1  # kept, but killed before it could say so
        told = found
        with engine.connect() as connection:
            assert set(connection.scalars(select(submissions.c.bundle))) == {b"x" * 20000}
        engine.dispose()


def until(true: Callable[[], bool]) -> None:
    """Waits for something that comes soon; a minute is too long."""
    for _ in range(6000):
        if true():
            return
        time.sleep(0.01)
    raise AssertionError("it did not come")


def no_large_files() -> None:
    """For this process alone every file is full at a megabyte."""
    signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
    resource.setrlimit(resource.RLIMIT_FSIZE, (1 << 20, 1 << 20))


@pytest.fixture
def small_disk(tmp_path: Path) -> Iterator[Path]:
    """A file system of two megabytes; an ordinary folder where this machine lets none be mounted."""
    folder = tmp_path / "disk"
    folder.mkdir()
    mount = ["mount", "-t", "tmpfs", "-o", "size=2m", "tmpfs", folder]
    mounted = subprocess.run(mount, check=False, capture_output=True).returncode == 0
    yield folder
    if mounted:
        subprocess.run(["umount", folder], check=True)


@pytest.mark.parametrize("full", ["disk", "file"])
def test_a_full_disk_is_told_and_got_over(small_disk: Path, tmp_path: Path, full: str) -> None:
    mounted = full == "disk" and small_disk.is_mount()
    folder = small_disk if mounted else tmp_path
    if mounted:
        (folder / "spare").write_bytes(b"x" * 500_000)
    address = f"sqlite:///{folder / 'store.sqlite3'}"
    words = [sys.executable, "-c", WRITER, address, "0", "1000"]
    before = None if mounted else no_large_files
    done = subprocess.run(words, check=True, capture_output=True, text=True, timeout=60, preexec_fn=before)
    *told, failure = done.stdout.split()
    assert failure == "OperationalError"
    assert 5 < len(told) < 200
    if mounted:
        (folder / "spare").unlink()
    engine = open_database(address)
    assert kept(engine) == {f"urn:{number}" for number in told}
    one = Submission("urn:after", "R4", True, 1, "m", "1", "h", "p", "2026-12-01T08:30:00Z", b"x" * 20000)
    assert Submissions(engine).add(one, along("urn:after"))
    assert len(kept(engine)) == len(told) + 1
    engine.dispose()


@pytest.mark.parametrize("how", [signal.SIGINT, signal.SIGQUIT])
def test_a_restart_of_postgres_in_the_middle_is_told_and_got_over(
    postgres: str, postgres_server: Any, submission: Callable[..., Submission], how: signal.Signals
) -> None:
    engine = open_database(postgres)
    store = Submissions(engine)
    told, failed = set(), []
    stop = threading.Event()

    def write(worker: int) -> None:
        for number in range(100_000):
            if stop.is_set():
                return
            exam = f"urn:{worker}-{number}"
            try:
                assert store.add(submission(exam), along(exam))
                told.add(exam)
            except StorageError as error:
                failed.append((exam, str(error)))
                stop.wait(0.05)

    writers = [threading.Thread(target=write, args=(n,)) for n in range(3)]
    for writer in writers:
        writer.start()
    try:
        until(lambda: len(told) >= 30)
        postgres_server.stop(how)
        until(lambda: len(failed) >= 6)
        postgres_server.start()
        before = len(told)
        until(lambda: len(told) >= before + 30)
    finally:
        stop.set()
        for writer in writers:
            writer.join()
    found = kept(engine)
    assert told <= found
    # of the transactions that failed only those may be there that were under way when the answer was lost
    assert len(found - told) <= len(writers)
    assert all(text.isidentifier() for _, text in failed)  # the kind of failure, and nothing of its content
    engine.dispose()


def test_a_connection_that_is_cut_in_the_middle_keeps_nothing(
    postgres: str, submission: Callable[..., Submission]
) -> None:
    engine, other = open_database(postgres), connect(postgres)
    store = Submissions(engine)
    assert store.add(submission("urn:before"), along("urn:before"))

    def cut(connection: Connection, _row: int) -> None:
        own = connection.scalar(select(func.pg_backend_pid()))
        with other.connect() as second:
            assert second.scalar(select(func.pg_terminate_backend(own)))

    with pytest.raises(StorageError):
        store.add(submission("urn:cut"), along("urn:cut"), cut, along("urn:cut-2"))
    assert kept(engine) == {"urn:before"}
    assert store.add(submission("urn:cut"), along("urn:cut"))
    assert kept(engine) == {"urn:before", "urn:cut"}
    engine.dispose()
    other.dispose()


def test_postgres_that_is_away_is_told(postgres: str, postgres_server: Any) -> None:
    engine = open_database(postgres)
    postgres_server.stop()
    try:
        with pytest.raises(StorageError, match="OperationalError"):
            Submissions(engine).latest("urn:a", "R4", snomed=True)
    finally:
        postgres_server.start()
    assert Submissions(engine).latest("urn:a", "R4", snomed=True) is None
    engine.dispose()
