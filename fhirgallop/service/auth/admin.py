"""The local token of administrators, and a brake on guessing it."""

from __future__ import annotations

import hashlib
import hmac
import threading
from collections import OrderedDict
from collections.abc import Callable
from typing import Final

from fhirgallop.outcome import Issue
from fhirgallop.service import answers
from fhirgallop.service.auth.caller import ROLES, Caller

_MOST_WRONG: Final = 10
_WINDOW: Final = 60.0
_MOST_ADDRESSES: Final = 10_000


class Administrators:
    """Lets in who holds the token whose SHA-256 the settings have.

    Args:
        digest: SHA-256 of the token, hexadecimal; empty: nobody is let in.
        clock: seconds, never going back.
    """

    def __init__(self, digest: str, clock: Callable[[], float]) -> None:
        self._digest = digest
        self.brake = Brake(clock)

    def admit(self, text: str, address: str) -> Caller | None:
        """The administrator, or None where the token is another, which then counts as a wrong one.

        Args:
            text: what was presented.
            address: where from.

        Raises:
            RefusalError: 429 after too many wrong ones.
        """
        self.brake.check(address)
        found = self.known(text)
        if found is None:
            self.brake.failed(address)
        return found

    def known(self, text: str) -> Caller | None:
        """The administrator, or None where the token is another; whoever asks here minds the brake."""
        given = hashlib.sha256(text.encode("utf-8", "replace")).hexdigest()
        if self._digest and hmac.compare_digest(given, self._digest):
            return Caller("administrator", "administrator", roles=ROLES)
        return None


class Brake:
    """Counts what went wrong by address: after ten in a minute that address has to wait."""

    def __init__(self, clock: Callable[[], float]) -> None:
        self._clock = clock
        # by address: since when, and how often; the first to be forgotten stands first
        self._wrong: OrderedDict[str, tuple[float, int]] = OrderedDict()
        self._lock = threading.Lock()

    def check(self, address: str) -> None:
        """Refuses an address from which too much went wrong.

        Raises:
            RefusalError: 429.
        """
        since, often = self._wrong.get(address, (0.0, 0))
        left = since + _WINDOW - self._clock()
        if often >= _MOST_WRONG and left > 0:
            issue = Issue("error", "throttled", "auth-too-often", "Too many wrong tokens; try again later.")
            raise answers.RefusalError(429, [issue], {"Retry-After": str(int(left) + 1)})

    def failed(self, address: str) -> None:
        """Counts one that was wrong."""
        now = self._clock()
        with self._lock:
            since, often = self._wrong.pop(address, (now, 0))
            if now - since >= _WINDOW:
                since, often = now, 0
            self._wrong[address] = (since, often + 1)
            if len(self._wrong) > _MOST_ADDRESSES:
                self._wrong.popitem(last=False)
