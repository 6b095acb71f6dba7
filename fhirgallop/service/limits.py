"""How much one client, and all together, may ask of this process.

A client's requests fill a bucket that leaks at the permitted rate (generic cell rate algorithm, ITU-T I.371:
one moment is kept a client). Each process counts for itself.
"""

from __future__ import annotations

import math
from collections import Counter, OrderedDict
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from functools import partial
from typing import Any, Final, Literal, TypeVar

from anyio import CapacityLimiter, to_thread
from starlette.requests import Request

from fhirgallop.outcome import Issue
from fhirgallop.service import answers

T = TypeVar("T")
Work = Literal["examination", "cards"]

_MOST_CLIENTS: Final = 20_000
_BURST: Final = 2.0  # seconds of the permitted rate that may come at once


class Rate:
    """At most so many requests a second from each client, on average; a short burst may be quicker.

    Args:
        rate: requests a second; 0: no limit.
        clock: seconds, never going back.
    """

    def __init__(self, rate: float, clock: Callable[[], float]) -> None:
        self._step = 1 / rate if rate else 0.0
        self._clock = clock
        # when each client's bucket will be empty; the client asked last stands last
        self._empty: OrderedDict[str, float] = OrderedDict()

    def wait(self, client: str) -> float:
        """Seconds that a client has to wait; 0 when the request is let in, and then it counts."""
        if not self._step:
            return 0.0
        now = self._clock()
        empty = max(self._empty.pop(client, now), now)
        late = empty - now - _BURST
        if late <= 0:
            empty += self._step
        self._empty[client] = empty
        if len(self._empty) > _MOST_CLIENTS:
            self._empty.popitem(last=False)
        return max(late, 0.0)


class Limits:
    """The rate of each address and of each caller, and how many requests are worked on at once."""

    def __init__(
        self,
        *,
        rate: float,
        at_once: int,
        clock: Callable[[], float],
        coded_at_once: int = 8,
        cards_at_once: int = 2,
    ) -> None:
        self.turns: Final[Mapping[Work, CapacityLimiter]] = {
            "examination": CapacityLimiter(coded_at_once),
            "cards": CapacityLimiter(cards_at_once),
        }
        self._addresses = Rate(rate, clock)
        self._callers = Rate(rate, clock)
        self._at_once = at_once
        self._running: Counter[str] = Counter()

    @property
    def running(self) -> int:
        """How many requests are worked on."""
        return self._running.total()

    @contextmanager
    def counted(self, address: str) -> Iterator[None]:
        """Counts a request from this address while it is worked on."""
        self._running[address] += 1
        try:
            yield
        finally:
            self._running[address] -= 1
            if not self._running[address]:
                del self._running[address]

    def refusal(self, address: str) -> answers.RefusalError | None:
        """Why a request from this address, which is counted already, is not worked on, if so.

        One address has at most half of what may run at once: who sends bodies that never end shuts out
        nobody else.
        """
        if self._running[address] > max(1, self._at_once // 2) or self.running > self._at_once:
            text = "The service is busy with other requests; send it again in a moment."
            return _refusal(503, "transient", "http-busy", text, 1)
        wait = self._addresses.wait(address)
        return _too_many(wait) if wait else None

    def admit_caller(self, name: str) -> None:
        """Counts a request for a caller who has shown who they are, from whichever address.

        Raises:
            RefusalError: 429.
        """
        wait = self._callers.wait(name) if name else 0
        if wait:
            raise _too_many(wait)


def admit_caller(request: Request, name: str) -> None:
    """The same, for the limits of the service that the request came to."""
    limits: Limits = request.app.state.limits
    limits.admit_caller(name)


async def in_turn(request: Request, work: Work, act: Callable[..., T], *given: Any) -> T:
    """What `act` gives, called in a thread, one after the other as the requests came.

    Threads that all compute share one interpreter: with many at once everybody waits for the slowest. An
    examination waits for the database for much of its time, and better together with others.
    """
    limits: Limits = request.app.state.limits
    return await to_thread.run_sync(partial(act, *given), limiter=limits.turns[work])


def _too_many(wait: float) -> answers.RefusalError:
    """Source: RFC 6585, section 4."""
    text = "These are more requests than one client may send; wait as long as Retry-After says."
    return _refusal(429, "throttled", "http-too-many", text, math.ceil(wait))


def _refusal(status: int, code: str, rule: str, text: str, wait: int) -> answers.RefusalError:
    return answers.RefusalError(status, [Issue("error", code, rule, text)], {"Retry-After": str(wait)})
