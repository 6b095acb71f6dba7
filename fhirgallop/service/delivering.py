"""Workers that deliver while the service runs, and are let finish when it ends."""

from __future__ import annotations

import logging
from collections.abc import AsyncIterator, Iterator
from contextlib import asynccontextmanager
from typing import Final

from starlette.concurrency import run_in_threadpool

from fhirgallop.delivery.dispatch import Dispatch
from fhirgallop.service.metrics import Reading

log: Final = logging.getLogger("fhirgallop.delivery")


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
