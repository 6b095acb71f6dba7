"""Workers: each takes one delivery after the other, sends it, and writes down what became of it."""

from __future__ import annotations

import logging
import threading
import time
from collections import Counter
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from datetime import datetime
from typing import Final

from fhirgallop.delivery.answer import Verdict
from fhirgallop.delivery.patience import Chance, Patience, asked_to_wait
from fhirgallop.delivery.post import Post
from fhirgallop.storage.outbox import Claim, Outbox, Rest, Settled
from fhirgallop.storage.submissions import Also, StorageError

log: Final = logging.getLogger("fhirgallop.delivery")

_IDLE_SECONDS: Final = 0.5
_BROKEN_SECONDS: Final = 2.0
_TO_SETTLE_MS: Final = 5000


Trail = Callable[[Claim, Verdict], Sequence[Also]]


def no_trail(_claim: Claim, _verdict: Verdict) -> Sequence[Also]:
    """Nothing is kept beside the result."""
    return ()


@dataclass(frozen=True, slots=True)
class Way:
    """What every worker of a process works with.

    Attributes:
        outbox: where deliveries are taken from.
        post: sends them.
        patience: how failures are borne.
        timeout: ms that one exchange may take.
        clock: now, with a zone; the clocks of all processes must agree to a second or two.
        chance: evenly from 0 to 1.
        trail: what is kept of a try in the transaction that writes its result down.
    """

    outbox: Outbox
    post: Post
    patience: Patience
    timeout: int
    clock: Callable[[], datetime]
    chance: Chance
    trail: Trail = no_trail

    @property
    def lease(self) -> int:
        """Ms after which what a worker took comes back: a token, one exchange, and time to write it down."""
        return 2 * self.timeout + _TO_SETTLE_MS

    def now(self) -> int:
        """This moment in ms since 1970."""
        return round(self.clock().timestamp() * 1000)


class Workers:
    """Threads that deliver until they are told to stop, and counts of what they did."""

    def __init__(self, way: Way, names: list[str]) -> None:
        self._way = way
        self._stop = threading.Event()
        self._lock = threading.Lock()
        self._counts: Counter[str] = Counter()
        self._threads = [
            threading.Thread(target=self._work, args=(name,), name=f"delivery-{number}", daemon=True)
            for number, name in enumerate(names)
        ]

    def start(self) -> None:
        """Starts the threads."""
        for thread in self._threads:
            thread.start()

    def stop(self, within: float) -> bool:
        """Lets each finish what it is sending; False when some did not within so many seconds.

        What they had in hand then comes back by itself when its lease runs out: it may have arrived.
        """
        self._stop.set()
        until = time.monotonic() + within
        for thread in self._threads:
            thread.join(max(until - time.monotonic(), 0))
        return not any(thread.is_alive() for thread in self._threads)

    def counts(self) -> dict[str, int]:
        """Tries since the start by what they came to: `delivered` or a kind of failure (`422`, `refused`)."""
        with self._lock:
            return dict(self._counts)

    def _work(self, name: str) -> None:
        while not self._stop.is_set():
            try:
                kind = deliver_one(self._way, name)
            except StorageError as error:
                log.error("deliveries wait: the database failed (%s)", error)  # noqa: TRY400 - no data in logs
                self._stop.wait(_BROKEN_SECONDS)
                continue
            except Exception as error:  # noqa: BLE001 - a worker that ends would stop deliveries in silence
                log.error("deliveries wait: unexpected %s", type(error).__name__)  # noqa: TRY400
                self._stop.wait(_BROKEN_SECONDS)
                continue
            if not kind:
                self._stop.wait(_IDLE_SECONDS)
                continue
            with self._lock:
                self._counts[kind] += 1


def deliver_one(way: Way, worker: str) -> str:
    """Takes one delivery, sends it and writes the result down; what it came to, empty when there was none.

    Raises:
        StorageError: the database failed; the delivery is taken up again when its lease runs out.
    """
    claim = way.outbox.claim(worker, way.now(), lease=way.lease, after=way.patience.after)
    if claim is None:
        return ""
    verdict = way.post.send(claim.bundle, lambda: way.now() + way.timeout + _TO_SETTLE_MS // 2 < claim.lease)
    settled = _settled(way, claim, verdict)
    if not way.outbox.settle(claim, settled, _rest(way, verdict), *way.trail(claim, verdict)):
        log.warning("delivery %s was taken over by another worker before its result was written", claim.id)
    _tell(claim, settled, verdict)
    return verdict.kind


def _settled(way: Way, claim: Claim, verdict: Verdict) -> Settled:
    now = way.now()
    if verdict.meaning == "delivered":
        return Settled("delivered", due=now, outcome=verdict.outcome)
    wait = way.patience.wait(claim.attempts, way.chance)
    # what was given up may still be worked on over there; it must not be overtaken by what follows
    still_working = way.timeout if verdict.kind == "timed-out" else 0
    due = now + max(wait, still_working, asked_to_wait(verdict.retry_after, way.clock()))
    return Settled(
        "failed" if _is_final(claim, verdict, way.patience) else "waiting",
        verdict.reason,
        due,
        verdict.outcome,
    )


def _is_final(claim: Claim, verdict: Verdict, patience: Patience) -> bool:
    """Whether a person is called: it would be refused again, or was tried often while others got through."""
    up = claim.failures < patience.after
    return verdict.meaning == "failed" or (verdict.ends and up and claim.attempts >= patience.tries)


def _rest(way: Way, verdict: Verdict) -> Rest | None:
    """How the destination is left alone; None when it answered as one that is well."""
    if verdict.well:
        return None
    now, asked = way.now(), asked_to_wait(verdict.retry_after, way.clock())
    # a refusal of rights, or of the address, would meet every delivery: nobody else needs to run into it
    weight = way.patience.after if verdict.meaning == "denied" else 1
    return Rest(weight, lambda failures: now + max(way.patience.pause(failures, way.chance), asked))


def _tell(claim: Claim, settled: Settled, verdict: Verdict) -> None:
    """A line for whoever runs this: numbers and reasons, no patient data."""
    if settled.state == "failed":
        log.error("delivery %s failed and wants a person: %s", claim.id, verdict.reason)
    elif verdict.meaning == "denied":
        log.error("nothing can be delivered until this is seen to: %s", verdict.reason)
    elif settled.state == "waiting":
        log.warning("delivery %s is tried again: %s", claim.id, verdict.reason)
