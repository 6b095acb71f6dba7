"""How long to wait before the next try, and for how long nobody asks a destination that is down.

Waits grow twofold and are drawn evenly from nothing to the full length ("full jitter"), so that many that
failed together do not come back together.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from datetime import UTC, datetime
from email.utils import parsedate_to_datetime
from typing import Final

Chance = Callable[[], float]  # evenly from 0 to 1, as random.random

_MOST_ASKED: Final = 3_600_000
_MOST_DOUBLINGS: Final = 40


@dataclass(frozen=True, slots=True)
class Patience:
    """How failures are borne; times in milliseconds.

    Attributes:
        first: longest wait before the second try.
        most: longest wait before any try, and longest rest of a destination unless it asks for more.
        tries: tries after which a person is called, where the destination takes others meanwhile.
        after: failures in a row after which a destination counts as down.
        rest: first rest of a destination that is down.
    """

    first: int
    most: int
    tries: int
    after: int
    rest: int

    def wait(self, attempts: int, chance: Chance) -> int:
        """How long a delivery waits after so many tries."""
        return round(_grown(self.first, attempts - 1, self.most) * chance())

    def pause(self, failures: int, chance: Chance) -> int:
        """How long nobody asks the destination after so many failures in a row; 0 while it counts as up.

        At least half of the full length, so that it is a rest.
        """
        if failures < self.after:
            return 0
        return round(_grown(self.rest, failures - self.after, self.most) * (1 + chance()) / 2)


def _grown(first: int, doublings: int, most: int) -> int:
    return min(most, first << min(max(doublings, 0), _MOST_DOUBLINGS))


def asked_to_wait(retry_after: str, now: datetime) -> int:
    """Milliseconds that a `Retry-After` header asks for, an hour at most; 0 where it says nothing.

    Source: RFC 9110, section 10.2.3: seconds, or a date.
    """
    text = retry_after.strip()
    if text.isascii() and text.isdigit():
        return min(int(text[:9]) * 1000, _MOST_ASKED)
    try:
        until = parsedate_to_datetime(text)
    except (ValueError, IndexError):
        return 0
    if until.tzinfo is None:
        until = until.replace(tzinfo=UTC)
    return min(max(round((until - now).total_seconds() * 1000), 0), _MOST_ASKED)
