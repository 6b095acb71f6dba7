"""Once an hour, deletes what was kept long enough; the first time a minute after the start."""

from __future__ import annotations

import asyncio
import logging
from collections.abc import AsyncIterator, Callable
from contextlib import asynccontextmanager, suppress
from datetime import datetime
from functools import partial
from typing import Final

import anyio.to_thread
from sqlalchemy import Engine

from fhirgallop.settings import Settings
from fhirgallop.storage.retention import Keeping, prune
from fhirgallop.storage.submissions import StorageError

log: Final = logging.getLogger("fhirgallop.service")

_FIRST: Final = 60.0
_EVERY: Final = 3600.0


def keeping(settings: Settings) -> Keeping:
    """How long what is kept at this site."""
    return Keeping(
        settings.keep_exams,
        settings.keep_cards,
        settings.keep_batches,
        settings.keep_audit,
        settings.idempotency_hours,
        settings.keep_samples,
    )


@asynccontextmanager
async def house_kept(
    engine: Engine,
    how_long: Keeping,
    clock: Callable[[], datetime],
    *,
    first: float = _FIRST,
    every: float = _EVERY,
) -> AsyncIterator[None]:
    """While the block lasts; a failure of the database is logged, and it is tried again next time."""
    task = asyncio.create_task(_again_and_again(partial(_once, engine, how_long, clock), first, every))
    try:
        yield
    finally:
        task.cancel()
        with suppress(asyncio.CancelledError):
            await task


async def _again_and_again(do: Callable[[], None], first: float, every: float) -> None:
    wait = first
    while True:
        await asyncio.sleep(wait)
        # the end of the service does not wait for it: it goes in small transactions
        await anyio.to_thread.run_sync(do, abandon_on_cancel=True)
        wait = every


def _once(engine: Engine, how_long: Keeping, clock: Callable[[], datetime]) -> None:
    try:
        gone = prune(engine, how_long, clock())
    except StorageError as error:
        log.warning("what was kept long enough could not be deleted: %s", error)
        return
    if gone:
        log.info("kept long enough and deleted: %s", ", ".join(f"{n} {name}" for name, n in gone.items()))
