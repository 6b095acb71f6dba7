"""What rules raised, counted in memory and written by month every half minute, off the way of a request.

A process that is killed loses the counts of its last half minute: they are statistics, and no patient's data.
"""

from __future__ import annotations

import asyncio
import logging
import threading
from collections import Counter
from collections.abc import AsyncIterator, Callable, Mapping
from contextlib import asynccontextmanager, suppress
from datetime import datetime
from typing import Final

import anyio.to_thread

from fhirgallop.storage.rule_counts import RuleCounts
from fhirgallop.storage.submissions import StorageError

log: Final = logging.getLogger("fhirgallop.service")

_EVERY: Final = 30.0


class RuleTally:
    """Counts of one process that are not written yet; its methods may be called by any thread."""

    def __init__(self, counts: RuleCounts, clock: Callable[[], datetime]) -> None:
        self._counts = counts
        self._clock = clock
        self._lock = threading.Lock()
        self._new: Counter[tuple[str, str]] = Counter()

    def raised(self, fates: Mapping[tuple[str, str], int]) -> None:
        """Counts what the rules raised in one call, by rule and fate."""
        with self._lock:
            self._new.update(fates)

    def write(self) -> None:
        """Writes what is new; what cannot be written is kept for the next time."""
        with self._lock:
            new, self._new = self._new, Counter()
        if not new:
            return
        try:
            written = self._counts.add(self._clock().strftime("%Y-%m"), new)
        except StorageError as error:
            log.warning("the counts of the rules could not be written: %s", error)
            written = False
        if not written:
            self.raised(new)


@asynccontextmanager
async def rules_counted(tally: RuleTally, every: float = _EVERY) -> AsyncIterator[None]:
    """Writes again and again while the block lasts, and at its end."""
    task = asyncio.create_task(_again_and_again(tally, every))
    try:
        yield
    finally:
        task.cancel()
        with suppress(asyncio.CancelledError):
            await task
        await anyio.to_thread.run_sync(tally.write)


async def _again_and_again(tally: RuleTally, every: float) -> None:
    while True:
        await asyncio.sleep(every)
        await anyio.to_thread.run_sync(tally.write)
