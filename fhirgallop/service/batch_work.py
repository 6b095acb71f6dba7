"""Threads that code batches, record by record, each in a transaction with its result.

Whoever holds a batch renews its lease with each record; when a process dies, another one, or the same when it
is back, goes on where it stopped.
"""

from __future__ import annotations

import logging
import threading
from collections.abc import AsyncIterator, Callable, Iterator, Mapping, Sequence
from contextlib import asynccontextmanager
from dataclasses import dataclass, replace
from datetime import datetime
from itertools import islice
from typing import Any, Final

from sqlalchemy import Connection, Engine
from starlette.concurrency import run_in_threadpool

from fhirgallop.codes import fhirjson
from fhirgallop.intake.reading import Read
from fhirgallop.intake.record import LocalRecord
from fhirgallop.mapping.template_map import TemplateMap
from fhirgallop.outcome import Issue, operation_outcome, ordered
from fhirgallop.service.audit import Auditor
from fhirgallop.service.audit_event import Deed
from fhirgallop.service.batch_desk import Errand, records
from fhirgallop.service.exam_desk import BUSY, ExamDesk
from fhirgallop.service.examinations import BusyError, Coded, Wish, done_to
from fhirgallop.service.logging import place
from fhirgallop.settings import Settings
from fhirgallop.storage.batches import Batch, Batches, NewResult, SupersededError, add_result
from fhirgallop.storage.submissions import Also, StorageError, Submissions

log: Final = logging.getLogger("fhirgallop.service")

_LEASE_MS: Final = 60_000
_POLL_SECONDS: Final = 2.0
_PAUSE_SECONDS: Final = 5.0
_BUSY_TRIES: Final = 20
_BUSY_SECONDS: Final = 0.25
_NO_MAP: Final = Issue(
    "error", "not-found", "batch-map-gone",
    "The template map of this batch is no longer published; send the record again with another.",
)  # fmt: skip
_OTHER_MAP: Final = Issue(
    "information", "informational", "batch-map-changed",
    "The template map was changed after this batch was taken in; the record was read by the newer version.",
)  # fmt: skip
_BROKE: Final = Issue(
    "fatal", "exception", "record-broke",
    "Something broke at this record, and nothing of it was kept; tell the operator the time of day.",
)  # fmt: skip
_REST_BROKE: Final = Issue(
    "fatal", "exception", "batch-broke",
    "Something broke while the body was read on from here; tell the operator, and send what follows again.",
)  # fmt: skip


@dataclass(frozen=True, slots=True)
class _Held:
    """A batch that a worker holds."""

    batch: str
    worker: str
    errand: Errand


class BatchWork:
    """The threads of one process."""

    def __init__(
        self,
        engine: Engine,
        desk: ExamDesk,
        shelf: Mapping[str, TemplateMap],
        settings: Settings,
        clock: Callable[[], datetime],
        auditor: Auditor,
        new_id: Callable[[], str],
    ) -> None:
        self._store = Batches(engine)
        self._submissions = Submissions(engine)
        self._desk = desk
        self._shelf = shelf
        self._settings = settings
        self._clock = clock
        self._auditor = auditor
        self._new_id = new_id
        self._stopping = threading.Event()
        self._something = threading.Event()
        self._threads: list[threading.Thread] = []

    def start(self) -> None:
        """Starts as many threads as the settings say."""
        for number in range(self._settings.batch_workers):
            thread = threading.Thread(target=self._run, name=f"batch-{number}", daemon=True)
            thread.start()
            self._threads.append(thread)

    def stop(self, seconds: float) -> None:
        """Lets each thread finish its record and give its batch back, for so long at most."""
        self._stopping.set()
        self._something.set()
        for thread in self._threads:
            thread.join(seconds)

    def wake(self) -> None:
        """There is something to do."""
        self._something.set()

    def _run(self) -> None:
        worker = self._new_id()
        while not self._stopping.is_set():
            try:
                batch = self._store.claim(worker, now=self._now(), until=self._now() + _LEASE_MS)
                if batch is not None:
                    self._go_through(batch, worker)
                    continue
                self._something.wait(_POLL_SECONDS)
                self._something.clear()
            except StorageError as error:
                log.error("a batch waits, storage failed: %s", error)  # noqa: TRY400 - no traceback
                self._stopping.wait(_PAUSE_SECONDS)

    def _go_through(self, batch: Batch, worker: str) -> None:
        """Codes what is left of a batch.

        Raises:
            StorageError: the database failed; the batch may be claimed again.
        """
        held = _Held(batch.id, worker, Errand.read(batch.wish))
        log.info("batch %s: from record %d of %d on", batch.id, batch.done + 1, batch.total)
        position = batch.done
        try:
            for read in self._left(held, batch.done):
                if self._stopping.is_set():
                    self._store.release(batch.id, worker)
                    return
                if read is None:
                    self._keep(held, position, 0, "not-stored", [_REST_BROKE])
                else:
                    self._step(held, position, read)
                position += 1
        except SupersededError:
            log.info("batch %s: given up, or gone on with elsewhere", batch.id)
            return
        self._store.finish(batch.id, worker)
        log.info("batch %s: done", batch.id)

    def _left(self, held: _Held, done: int) -> Iterator[Read | None]:
        """The records not gone through yet; None where the reader broke, and then no more."""
        body = self._store.request(held.batch)
        try:
            yield from islice(records(body, held.errand.kind, self._settings), done, None)
        except Exception as error:  # noqa: BLE001 - the batch must come to an end, and others wait behind it
            log.error("a batch broke: %s at %s", type(error).__name__, place(error))  # noqa: TRY400
            yield None

    def _step(self, held: _Held, position: int, read: Read) -> None:
        """One record, with its result.

        Raises:
            SupersededError: the batch is no longer held.
            StorageError: the database failed; nothing of the record was kept.
        """
        template = self._shelf.get(held.errand.map)
        if not isinstance(read, LocalRecord):
            self._keep(held, position, read.line, "unreadable", read.issues)
        elif template is None:
            self._keep(held, position, read.line, "refused", [_NO_MAP])
        else:
            wish = Wish(template, held.errand.edition, held.errand.snomed)
            if issue := self._coded(held, position, read, wish):
                self._keep(held, position, read.line, "not-stored", [issue])

    def _coded(self, held: _Held, position: int, record: LocalRecord, wish: Wish) -> Issue | None:
        """Codes a record and keeps its result with it; an issue where that could not be done."""

        def along(coded: Coded) -> Sequence[Also]:
            status = "refused" if coded.bundle is None else "coded"
            if wish.template.version != held.errand.version:
                issues = ordered([*coded.result.issues, _OTHER_MAP])
                coded = replace(coded, result=replace(coded.result, issues=tuple(issues)))
            said = self._desk.told(coded, held.errand.review)
            said.pop("bundle", None)
            said = {"line": record.line, "status": status, **said}
            add = self._result(held, position, status, coded.patient, said)
            whose = (coded.patient,) if coded.patient else ()
            deed = Deed(*done_to(coded), whose, (coded.identity,) if coded.identity else ())
            return (add, self._auditor.kept_by_worker(deed, held.errand.caller))

        for _ in range(_BUSY_TRIES):
            try:
                self._desk.coded(record, wish, along)
            except BusyError:
                self._stopping.wait(_BUSY_SECONDS)
            except (StorageError, SupersededError):
                raise
            except Exception as error:  # noqa: BLE001 - one record that breaks us must not stop the others
                log.error("a record of a batch broke: %s at %s", type(error).__name__, place(error))  # noqa: TRY400
                return _BROKE
            else:
                return None
        return BUSY

    def _keep(self, held: _Held, position: int, line: int, status: str, issues: Sequence[Issue]) -> None:
        """Keeps the result of a record that gave no examination."""
        said = {"line": line, "status": status, "outcome": operation_outcome(issues)}
        if not self._submissions.beside(0, self._result(held, position, status, "", said)):
            raise SupersededError

    def _result(self, held: _Held, position: int, status: str, patient: str, said: Mapping[str, Any]) -> Also:
        lease = self._now() + _LEASE_MS

        def add(connection: Connection, row: int) -> None:
            submission = row if status == "coded" else None
            result = NewResult(position, status, patient, submission, fhirjson.write(said))
            add_result(connection, held.batch, held.worker, result, lease=lease)

        return add

    def _now(self) -> int:
        return int(self._clock().timestamp() * 1000)


@asynccontextmanager
async def batches_coded(work: BatchWork, seconds: float) -> AsyncIterator[None]:
    """The threads run inside; at the end each has so long to finish its record."""
    work.start()
    try:
        yield
    finally:
        await run_in_threadpool(work.stop, seconds)
