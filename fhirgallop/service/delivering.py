"""Workers that deliver while the service runs, and are let finish when it ends."""

from __future__ import annotations

import logging
from collections.abc import AsyncIterator, Iterator, Sequence
from contextlib import asynccontextmanager
from typing import Final

from starlette.concurrency import run_in_threadpool

from fhirgallop.delivery.addresses import origin_of
from fhirgallop.delivery.answer import Verdict
from fhirgallop.delivery.dispatch import Dispatch
from fhirgallop.delivery.worker import Trail
from fhirgallop.service.audit import Auditor
from fhirgallop.service.audit_event import Deed, Ending
from fhirgallop.service.metrics import Reading
from fhirgallop.settings import Settings
from fhirgallop.storage.outbox import Claim
from fhirgallop.storage.submissions import Also

log: Final = logging.getLogger("fhirgallop.delivery")


def delivery_trail(auditor: Auditor, settings: Settings) -> Trail:
    """An audit event for each answered try: whose data went where, and how it was taken."""
    receiver = origin_of(settings.deliver_to) or ""

    def trail(claim: Claim, verdict: Verdict) -> Sequence[Also]:
        if not verdict.status:
            return ()
        # what a transaction is by BALP: executed, whatever its entries do
        deed = Deed("E", "transaction", (claim.patient,), (claim.exam,), receiver=receiver)
        ending = Ending(verdict.status)
        return (auditor.kept_by_worker(deed, "", ending=ending, request=verdict.request),)

    return trail


@asynccontextmanager
async def delivering(dispatch: Dispatch | None, finish_seconds: float) -> AsyncIterator[None]:
    """Delivers inside the block; afterwards each worker may finish what it sends, for so many seconds."""
    if dispatch is None:
        yield
        return
    dispatch.workers.start()
    try:
        yield
    finally:
        if not await run_in_threadpool(dispatch.stop, finish_seconds):
            log.warning("a delivery was cut off; it is sent again when its lease has run out")


def readings(dispatch: Dispatch) -> Iterator[Reading]:
    """The tries of this process's workers, for whoever watches; the outbox is watched in readiness.py."""
    counts = {kind: float(number) for kind, number in dispatch.workers.counts().items()}
    yield Reading("delivery_tries", "Tries since the start, by what they came to.", counts, "result")
