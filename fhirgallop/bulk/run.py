"""A run on one machine: the input cut into parts, and processes that code them.

Processes read byte ranges of the files and write files themselves; nothing but the places of parts goes
through pipes. A run that was killed goes on where it was when it is started again over the same folder.
"""

from __future__ import annotations

import fcntl
import gc
import multiprocessing
import os
import signal
import threading
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import FIRST_COMPLETED, Future, ProcessPoolExecutor, wait
from concurrent.futures.process import BrokenProcessPool
from contextlib import contextmanager
from datetime import datetime
from multiprocessing import connection
from pathlib import Path
from typing import Any, Final

import msgspec

from fhirgallop.bulk.coding import template_of
from fhirgallop.bulk.findings import needed
from fhirgallop.bulk.folder import Folder, part_name, write_json
from fhirgallop.bulk.part import Job, Worker, jobs_of
from fhirgallop.bulk.wish import BulkError, Source, Wish

DESCRIPTION: Final = "run.json"
_LOCK: Final = "run.lock"
_TRIES: Final = 3
_LOOK_SECONDS: Final = 0.5

Progress = Callable[[int, int], None]
"""Called with the examinations coded since the start, and the bytes of the input that are done."""


def recorded_before(folder: Path) -> datetime | None:
    """The moment of conversion of a run that this folder holds already; None where it holds none."""
    try:
        said = msgspec.json.decode((folder / DESCRIPTION).read_bytes())
        return datetime.fromisoformat(said["recorded"])
    except (FileNotFoundError, msgspec.DecodeError, KeyError, ValueError):
        return None


def run(
    wish: Wish, inputs: Sequence[Source], out: Path, *, workers: int, progress: Progress | None = None
) -> None:
    """Codes all of the input into `out`; what is there already from the same run is not done again.

    Args:
        wish: how records are coded and written.
        inputs: the files.
        out: the folder, which must be new, empty, or hold the same run.
        workers: processes, at least 1.
        progress: told of how far it is, twice a second.

    Raises:
        BulkError: the folder holds another run, or is in use; the input changed; or processes end by
            themselves again and again.
        MapError: the map has faults.
        OSError: a file cannot be read or written.
    """
    template_of(wish)
    if wish.findings:
        needed()
    folder = Folder(out)
    out.mkdir(0o750, parents=True, exist_ok=True)  # patients' data
    with _alone(out):
        _agree(wish, inputs, out)
        crew = _Crew(wish, out, workers, progress or (lambda _exams, _bytes: None))
        crew.work(_jobs(wish, inputs, folder))
        for source in inputs:
            state = source.path.stat()
            if (state.st_size, state.st_mtime_ns) != (source.size, source.changed):
                raise BulkError(f"{source.path} was changed during the run; start again with another folder")


@contextmanager
def _alone(out: Path) -> Iterator[None]:
    with (out / _LOCK).open("wb") as lock:
        try:
            fcntl.flock(lock, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError:
            raise BulkError(f"another run is at work in {out}; wait for it, or name another folder") from None
        yield


def _agree(wish: Wish, inputs: Sequence[Source], out: Path) -> None:
    """Describes the run in its folder, or makes sure that the folder holds this very run."""
    description = {**wish.as_dict(), "inputs": [source.as_dict() for source in inputs]}
    path = out / DESCRIPTION
    if not path.exists():
        if any(entry.name != _LOCK and not entry.name.startswith(".") for entry in out.iterdir()):
            raise BulkError(f"{out} holds files that are no run; name a new folder")
        write_json(path, description)
        return
    before: dict[str, Any] = msgspec.json.decode(path.read_bytes())
    other = [name for name, value in description.items() if before.get(name) != value]
    if other:
        raise BulkError(
            f"{out} holds a run with other {', '.join(other)}; go on with the same, or name a new folder"
        )


def _jobs(wish: Wish, inputs: Sequence[Source], folder: Folder) -> Iterator[tuple[Job, bool]]:
    """Every job in the order of the input, and whether it is done already."""
    for file, source in enumerate(inputs):
        for job in jobs_of(file, source, wish):
            yield job, job.in_parts and folder.is_done(part_name(file, job.part))


class _Crew:
    """The processes, and what they are given to do."""

    def __init__(self, wish: Wish, out: Path, workers: int, progress: Progress) -> None:
        self._wish = wish
        self._out = out
        self._workers = workers
        self._progress = progress
        self._context = multiprocessing.get_context("spawn")
        self._counted = self._context.Value("q", 0)
        self._bytes = 0

    def work(self, jobs: Iterator[tuple[Job, bool]]) -> None:
        """Has every job done that is not done yet."""
        again: list[Job] = []
        failed = 0
        while True:
            Folder(self._out).prepare()
            pool = self._pool()
            try:
                left = self._through(pool, again, jobs)
            finally:
                pool.shutdown(wait=True, cancel_futures=True)
            if not left:
                return
            failed = failed + 1 if left == again else 1
            if failed >= _TRIES:
                raise BulkError(
                    f"processes ended by themselves {failed} times at the same records; there may be too "
                    "little memory for so many workers"
                )
            again = left

    def _through(
        self, pool: ProcessPoolExecutor, again: list[Job], jobs: Iterator[tuple[Job, bool]]
    ) -> list[Job]:
        """Goes through the jobs; gives those that were on the way when a process ended by itself."""
        waiting: dict[Future[None], Job] = {}
        given = dict.fromkeys(again)  # in the hands of the processes, or about to be
        try:
            for job in again:
                waiting[pool.submit(_do, job)] = job
            for job, done in jobs:
                if done:
                    self._bytes += job.size
                    continue
                given[job] = None
                waiting[pool.submit(_do, job)] = job
                while len(waiting) > 2 * self._workers:
                    self._collect(waiting, given)
            while waiting:
                self._collect(waiting, given)
        except BrokenProcessPool:
            return list(given)
        return []

    def _collect(self, waiting: dict[Future[None], Job], given: dict[Job, None]) -> None:
        done, _ = wait(waiting, timeout=_LOOK_SECONDS, return_when=FIRST_COMPLETED)
        for future in done:
            future.result()
            job = waiting.pop(future)
            del given[job]
            self._bytes += job.size
        self._progress(self._counted.value, self._bytes)

    def _pool(self) -> ProcessPoolExecutor:
        return ProcessPoolExecutor(
            self._workers,
            mp_context=self._context,
            initializer=_begin,
            initargs=(self._wish, self._out, self._counted),
        )


# A process of the pool is one worker; the pool hands on nothing from one call to the next.
_worker: list[Worker] = []


def _begin(wish: Wish, out: Path, counted: Any) -> None:
    """Makes this process a worker, which ends when the process that started it does."""
    threading.Thread(target=_end_with_parent, daemon=True).start()
    signal.signal(signal.SIGINT, signal.SIG_IGN)  # a key pressed at the terminal is for the first process

    def say(count: int) -> None:
        with counted.get_lock():
            counted.value += count

    _worker.append(Worker(wish, out, say))


def _end_with_parent() -> None:
    parent = multiprocessing.parent_process()
    if parent is not None:
        connection.wait([parent.sentinel])
        os._exit(1)


def _do(job: Job) -> None:
    _worker[0].do(job)
    if not gc.get_freeze_count():  # what the first part has loaded stays; the collector need not look at it
        gc.collect()
        gc.freeze()
