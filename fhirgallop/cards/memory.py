"""What was already shown and answered for one patient: a value that is handed in and handed back.

It holds digests, no findings; whoever keeps it keeps it with the patient's record.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, replace
from datetime import datetime, timedelta
from enum import StrEnum
from typing import Any, Final

TRUE_FOR: Final = timedelta(days=365)
"""How long "true in this patient" holds (alert policy: 12 months)."""
MAX_ENCOUNTERS: Final = 50


class Answer(StrEnum):
    """What a clinician may answer to a card."""

    LOOKED_AGAIN = "looked-again"
    """Heard, felt or read again, and it stands."""
    WILL_CORRECT = "will-correct"
    """An entry will be corrected by its author."""
    BOTH_TRUE = "both-true"
    """Both entries are true; said once, it holds for the encounter."""
    TRUE_IN_PATIENT = "true-in-this-patient"
    """Both are true in this patient, for twelve months."""


@dataclass(frozen=True, slots=True)
class Memory:
    """One patient's memory.

    Attributes:
        patient: whose; another patient's memory is refused.
        shown: encounter -> digests of what was in view there, the oldest encounter first.
        answered: encounter -> digests of what was answered there.
        interrupted: encounters in which something interrupted.
        true: digest of a combination -> until when it is known to be true in this patient.
    """

    patient: str
    shown: tuple[tuple[str, frozenset[str]], ...] = ()
    answered: tuple[tuple[str, frozenset[str]], ...] = ()
    interrupted: tuple[str, ...] = ()
    true: tuple[tuple[str, datetime], ...] = ()

    def was_shown(self, encounter: str, digest: str) -> bool:
        """True when the same entries were in view in this encounter."""
        return digest in dict(self.shown).get(encounter, ())

    def was_answered(self, encounter: str, digest: str) -> bool:
        """True when the same entries were answered in this encounter."""
        return digest in dict(self.answered).get(encounter, ())

    def is_true(self, digest: str, now: datetime) -> bool:
        """True while the combination is known to be true in this patient."""
        until = dict(self.true).get(digest)
        return until is not None and now < until

    def showing(self, encounter: str, digests: Iterable[str], *, interrupting: bool) -> Memory:
        """The memory after something was shown."""
        interrupted = self.interrupted
        if interrupting and encounter not in interrupted:
            interrupted = (*interrupted, encounter)[-MAX_ENCOUNTERS:]
        return replace(self, shown=_with(self.shown, encounter, digests), interrupted=interrupted)

    def answering(self, encounter: str, digests: Iterable[str]) -> Memory:
        """The memory after an answer that holds for the encounter."""
        return replace(self, answered=_with(self.answered, encounter, digests))

    def knowing(self, digests: Iterable[str], now: datetime) -> Memory:
        """The memory after "true in this patient"; what has run out is forgotten."""
        kept = {digest: until for digest, until in self.true if until > now}
        kept.update(dict.fromkeys(digests, now + TRUE_FOR))
        return replace(self, true=tuple(sorted(kept.items())))

    def as_dict(self) -> dict[str, Any]:
        """JSON values."""
        return {
            "patient": self.patient,
            "shown": {encounter: sorted(digests) for encounter, digests in self.shown},
            "answered": {encounter: sorted(digests) for encounter, digests in self.answered},
            "interrupted": list(self.interrupted),
            "true": {digest: until.isoformat() for digest, until in self.true},
        }

    @classmethod
    def from_dict(cls, value: Mapping[str, Any]) -> Memory:
        """What `as_dict` gave.

        Raises:
            KeyError, ValueError: it is not what `as_dict` gives.
        """
        return cls(
            value["patient"],
            tuple((encounter, frozenset(digests)) for encounter, digests in value["shown"].items()),
            tuple((encounter, frozenset(digests)) for encounter, digests in value["answered"].items()),
            tuple(value["interrupted"]),
            tuple((digest, datetime.fromisoformat(until)) for digest, until in value["true"].items()),
        )


def _with(
    held: tuple[tuple[str, frozenset[str]], ...], encounter: str, digests: Iterable[str]
) -> tuple[tuple[str, frozenset[str]], ...]:
    found = dict(held)
    found[encounter] = found.pop(encounter, frozenset()) | frozenset(digests)
    return tuple(found.items())[-MAX_ENCOUNTERS:]
