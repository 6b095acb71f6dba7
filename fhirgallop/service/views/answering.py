"""What a clinician answers to a card on the page: kept as feedback, like that of a CDS Hooks client.

The card is kept with its answer: rule ids and digests, no findings. Two answers to one card by one person are
two reports; the later is shown first.
"""

from __future__ import annotations

import hashlib
import uuid
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from datetime import datetime
from typing import Final

from fhirgallop.cards.build import ANSWER_SYSTEM, Shown, answered
from fhirgallop.cards.card import Card, combination_digest, digest, entry_digest, may_be_true
from fhirgallop.cards.memory import TRUE_FOR, Answer
from fhirgallop.codes import fhirjson
from fhirgallop.observations.bundle import instant
from fhirgallop.storage.hooks import HookStore, KeptCard, KeptFeedback
from fhirgallop.storage.submissions import Also

# the "service" under which cards of the page are kept
PAGE: Final = "exam-page"
MOST_REASON: Final = 1000
LABELS: Final = {
    Answer.LOOKED_AGAIN: "Seen: I looked or listened again, and the entries stand",
    Answer.WILL_CORRECT: "An entry is wrong; its author will correct it",
    Answer.BOTH_TRUE: "Both entries are true today",
    Answer.TRUE_IN_PATIENT: "This is how this patient is",
}


@dataclass(frozen=True, slots=True)
class Given:
    """An answer that was given: in words, when (FHIR instant), and the reason that was written."""

    answer: str
    at: str
    reason: str


class Answers:
    """Keeps and tells the answers to the cards of the page."""

    def __init__(self, store: HookStore, clock: Callable[[], datetime]) -> None:
        self._store = store
        self._clock = clock

    def keep(
        self, exam: str, patient: str, card: Card, answer: Answer, reason: str, who: str, *also: Also
    ) -> None:
        """Keeps one answer.

        Args:
            exam: identity of the examination (`urn:uuid:...`).
            patient: digest of its patient.
            card: the card; it offers this answer.
            answer: what was chosen.
            reason: the clinician's words; may be empty.
            who: subject of the person; only a digest of it is made use of.
            also: what is kept in the same transaction as the card.

        Raises:
            ValueError: the card does not offer this answer.
            StorageError: the database failed.
        """
        if answer not in card.answers:
            raise ValueError("the card offers no such answer")
        now = instant(self._clock())
        id_ = card_id(exam, card)
        shown = _shown(card, id_)
        value = {"rules": shown.rules, "entries": shown.entries, "combinations": shown.combinations,
                 "shared": shown.shared}  # fmt: skip
        kept = KeptCard(id_, PAGE, patient, digest("encounter", patient, exam), fhirjson.write(value), now)
        self._store.keep_cards([kept], *also)
        key = hashlib.sha256(repr((PAGE, id_, answer.value, reason, who, now)).encode()).hexdigest()
        report = KeptFeedback(
            key, PAGE, id_, True, "overridden", b"[]", answer.value, ANSWER_SYSTEM, reason, now, now
        )  # fmt: skip
        self._store.add_feedback([report])

    def given(self, exam: str, cards: Sequence[Card]) -> dict[str, list[Given]]:
        """The answers to these cards, by the card's key, the latest first."""
        keys = {card_id(exam, card): card.key for card in cards}
        found: dict[str, list[Given]] = {}
        for one in self._store.feedback_to(list(keys)):
            known = answered(one.reason, one.reason_system)
            label = LABELS[known] if known else one.outcome
            found.setdefault(keys[one.card], []).append(Given(label, one.received, one.comment))
        return {key: list(reversed(listed)) for key, listed in found.items()}


def card_id(exam: str, card: Card) -> str:
    """The same for the same card of the same examination."""
    return str(uuid.uuid5(uuid.UUID(exam.removeprefix("urn:uuid:")), f"{PAGE}\n{card.key}"))


def true_for() -> int:
    """Days that "this is how this patient is" holds."""
    return TRUE_FOR.days


def _shown(card: Card, id_: str) -> Shown:
    return Shown(
        id_,
        tuple(dict.fromkeys(c.rule.id for c in card.conclusions)),
        tuple(dict.fromkeys(entry_digest(c) for c in card.conclusions)),
        tuple(dict.fromkeys(combination_digest(c) for c in card.conclusions if may_be_true(c))),
        card.level != "urgent",
    )
