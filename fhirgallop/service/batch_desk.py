"""Takes batches in, says how far they are, gives their results out.

Source: FHIR R5 "Asynchronous Bundle Request Pattern" and the Bulk Data guide's status request: 202 with an
absolute Content-Location, X-Progress and Retry-After while it lasts, 200 at its end, DELETE to give it up.
"""

from __future__ import annotations

import hashlib
from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace
from datetime import UTC, datetime
from typing import Any, Final

from sqlalchemy import Connection

from fhirgallop.codes import fhirjson
from fhirgallop.intake.detect import open_records
from fhirgallop.intake.limits import DEFAULT, Limits
from fhirgallop.intake.reading import Read
from fhirgallop.intake.record import LocalRecord
from fhirgallop.observations.bundle import instant
from fhirgallop.observations.editions import Edition
from fhirgallop.outcome import Issue, has_errors, operation_outcome
from fhirgallop.service import answers
from fhirgallop.service.auth.caller import Caller
from fhirgallop.service.exam_desk import Opinion
from fhirgallop.service.examinations import BusyError, Wish
from fhirgallop.service.keyed import KeyDesk, Keyed, KeyTakenError, Reply
from fhirgallop.settings import Settings
from fhirgallop.storage.batches import DONE, WAITING, Batch, Batches, KeptResult

PAGE: Final = 500
_RETRY_SECONDS: Final = 2


@dataclass(frozen=True, slots=True)
class Errand:
    """What a worker has to know of a batch beside its body.

    Attributes:
        map: name of the template map.
        version: its version when the batch was taken in.
        edition: FHIR edition of the Bundles.
        snomed: write SNOMED CT codings.
        review: how much of a review each result has.
        kind: media type of the body.
        caller: name of whom it belongs to, for the audit trail.
    """

    map: str
    version: str
    edition: Edition
    snomed: bool
    review: Opinion
    kind: str
    caller: str

    def text(self) -> bytes:
        """As it is kept."""
        return fhirjson.write({name: getattr(self, name) for name in self.__slots__})

    @staticmethod
    def read(text: bytes) -> Errand:
        """From what was kept."""
        return Errand(**fhirjson.read(text)[0])


def records(body: bytes, kind: str, settings: Settings) -> Iterator[Read]:
    """The records of a batch's body, one by one; what has to be read whole is bounded as in any request."""
    return open_records(body, content_type=kind, limits=_limits(settings))


def _limits(settings: Settings) -> Limits:
    whole = min(settings.max_body, DEFAULT.list_bytes)
    return replace(DEFAULT, depth=settings.max_depth, list_bytes=whole, workbook_bytes=whole)


class BatchDesk:
    """Answers what is asked of batches; each belongs to the caller who sent it."""

    def __init__(
        self,
        store: Batches,
        keys: KeyDesk,
        settings: Settings,
        clock: Callable[[], datetime],
        new_id: Callable[[], str],
        wake: Callable[[], None],
    ) -> None:
        """`wake` tells the workers that there is something to do."""
        self._store = store
        self._keys = keys
        self._settings = settings
        self._clock = clock
        self._new_id = new_id
        self._wake = wake

    def take(
        self,
        body: bytes,
        kind: str,
        wish: Wish,
        review: Opinion,
        caller: Caller,
        key: Keyed | None,
        base: str,
    ) -> Reply:
        """Keeps a batch, to be gone through later.

        Args:
            body: all its records.
            kind: media type of the body.
            wish: how they are to be coded.
            review: how much of a review each result has.
            caller: whom it belongs to.
            key: the sender's key, where there is one.
            base: address of the service.

        Raises:
            RefusalError: there is no record in it, or there are too many.
            StorageError: the database failed; nothing was kept.
        """
        if key and (known := self._keys.again(key)):
            return known
        total = self._counted(body, kind)
        id_ = self._new_id()
        errand = Errand(
            wish.template.name, wish.template.version, wish.edition, wish.snomed, review, kind, caller.name
        )
        text = f"Waiting to be coded: {total:,}. Ask how far they are at the address in Content-Location."
        headers = {
            "Content-Location": f"{base}/batches/{id_}",
            "Preference-Applied": "respond-async",
            "Retry-After": str(_RETRY_SECONDS),
        }
        reply = Reply(_informed("batch-waiting", text), answers.FHIR_JSON, headers, 202)
        batch = Batch(id_, owner(caller), WAITING, self._now(), errand.text(), total)
        also: list[Callable[[Connection], None]] = [self._keys.keep(key, reply)] if key else []
        try:
            self._store.add(batch, body, *also)
        except KeyTakenError:
            if key and (known := self._keys.again(key)):
                return known
            raise BusyError from None
        self._wake()
        return reply

    def _counted(self, body: bytes, kind: str) -> int:
        most = self._settings.batch_records
        total = 0
        usable = False
        issues: list[Issue] = []
        for read in records(body, kind, self._settings):
            total += 1
            if total > most:
                text = f"These are more than {most:,} examinations; send fewer at a time. None was kept."
                raise answers.refusal(413, "too-long", "http-too-many-records", text)
            if isinstance(read, LocalRecord):
                usable = True
            elif len(issues) < PAGE:
                issues += read.issues
        if not usable:
            raise unreadable(issues)
        return total

    def status(self, id_: str, caller: Caller, base: str) -> Reply:
        """How far a batch is, or what became of it.

        Raises:
            RefusalError: 404, this caller has no such batch.
            StorageError: the database failed.
        """
        batch = self._mine(id_, caller)
        if batch.state != DONE:
            progress = f"{batch.done:,} of {batch.total:,} gone through"
            headers = {"X-Progress": progress, "Retry-After": str(_RETRY_SECONDS)}
            return Reply(_informed("batch-coding", f"{progress}."), answers.FHIR_JSON, headers, 202)
        address = f"{base}/batches/{id_}"
        counts = self._store.counts(id_)
        errand = Errand.read(batch.wish)
        pages = range(0, batch.done, PAGE)
        manifest: dict[str, Any] = {
            "transactionTime": instant(datetime.fromtimestamp(batch.created / 1000, tz=UTC)),
            "request": f"{base}/exams?map={errand.map}",
            "requiresAccessToken": self._settings.authorised,
            "total": batch.total,
            **{status: counts[status] for status in ("coded", "refused", "unreadable", "not-stored")},
            "results": [
                {"url": f"{address}/results?first={first}", "count": min(PAGE, batch.done - first)}
                for first in pages
            ],
        }
        return Reply(fhirjson.write(manifest), answers.PLAIN_JSON)

    def results(self, id_: str, caller: Caller, first: int) -> tuple[Iterator[bytes], list[str]]:
        """One page of results, a line each, from position `first` on; and whose patients' they are.

        Raises:
            RefusalError: 404, this caller has no such batch.
            StorageError: the database failed.
        """
        self._mine(id_, caller)
        patients = self._store.patients(id_, first=first, count=PAGE)
        return (_line(one) for one in self._store.results(id_, first=first, count=PAGE)), patients

    def cancel(self, id_: str, caller: Caller) -> Reply:
        """Ends a batch; what was coded stays.

        Raises:
            RefusalError: 404, this caller has no such batch.
            StorageError: the database failed.
        """
        batch = self._store.cancel(id_, owner(caller))
        if batch is None:
            raise _none()
        text = (
            f"The batch is given up and its results are deleted. {batch.done:,} of {batch.total:,} "
            "examinations were gone through before; what was coded of them stays."
        )
        return Reply(_informed("batch-cancelled", text), answers.FHIR_JSON, status=202)

    def _mine(self, id_: str, caller: Caller) -> Batch:
        batch = self._store.get(id_, owner(caller))
        if batch is None:
            raise _none()
        return batch

    def _now(self) -> int:
        return int(self._clock().timestamp() * 1000)


def owner(caller: Caller) -> str:
    """Digest of a caller, as batches belong to one."""
    return hashlib.sha256(repr((caller.kind, caller.name)).encode("utf-8", "replace")).hexdigest()


def unreadable(issues: list[Issue]) -> answers.RefusalError:
    """The refusal of a body that holds no examination."""
    if not has_errors(issues):
        none = Issue("error", "required", "record-none", "The body holds no examination; send one.")
        issues = [none, *issues]
    too_long = any(issue.code == "too-long" and issue.is_error for issue in issues)
    return answers.RefusalError(413 if too_long else 400, issues)


def _line(result: KeptResult) -> bytes:
    if result.status != "coded":
        return result.result + b"\n"
    # null: coded, and deleted since
    return result.result[:-1] + b',"bundle":' + (result.bundle or b"null") + b"}\n"


def _informed(rule: str, text: str) -> bytes:
    return fhirjson.write(operation_outcome([Issue("information", "informational", rule, text)]))


def _none() -> answers.RefusalError:
    return answers.refusal(404, "not-found", "http-unknown-batch", "There is no such batch.")
