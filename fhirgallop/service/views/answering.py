"""What a clinician answers to a card on the page: kept as feedback, like that of a CDS Hooks client.

The card is kept with its answer: rule ids and digests, no findings. Two answers to one card by one person are
two reports; the later is shown first.
"""

from __future__ import annotations

import hashlib
import re
import uuid
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from datetime import datetime
from typing import Final

from fhirgallop.cards.build import ANSWER_SYSTEM, answered
from fhirgallop.cards.card import Card, combination_digest, digest, entry_digest, may_be_true
from fhirgallop.cards.memory import Answer
from fhirgallop.codes import fhirjson
from fhirgallop.observations.bundle import instant
from fhirgallop.outcome import has_errors
from fhirgallop.reasoning.rulebook import Rulebook
from fhirgallop.reasoning.vocabulary import Strength, Tier
from fhirgallop.storage.hooks import HookStore, KeptCard, KeptFeedback
from fhirgallop.storage.submissions import Also

# the "service" under which cards of the page are kept
PAGE: Final = "exam-page"
MOST_REASON: Final = 1000
_MOST: Final = 200
# of cards.card.digest
_DIGEST: Final = re.compile(r"[0-9a-f]{24}", re.ASCII)
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


@dataclass(frozen=True, slots=True)
class Carried:
    """A card as the form of its answer carries it: rule ids and digests, no findings.

    The chart that a card was raised with is not kept, so that the card cannot be made anew for its answer.

    Attributes:
        key: of the card.
        rules: ids of its rules.
        entries, combinations: digests of what it rests on (see cards.card).
        urgent: it can only be acknowledged.
        answers: what may be answered.
    """

    key: str
    rules: tuple[str, ...]
    entries: tuple[str, ...]
    combinations: tuple[str, ...]
    urgent: bool
    answers: tuple[Answer, ...]


class Answers:
    """Keeps and tells the answers to the cards of the page."""

    def __init__(self, store: HookStore, clock: Callable[[], datetime]) -> None:
        self._store = store
        self._clock = clock

    def keep(
        self, exam: str, patient: str, card: Carried, answer: Answer, reason: str, who: str, *also: Also
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
        id_ = card_id(exam, card.key)
        value = {"rules": card.rules, "entries": card.entries, "combinations": card.combinations,
                 "shared": not card.urgent}  # fmt: skip
        kept = KeptCard(id_, PAGE, patient, digest("encounter", patient, exam), fhirjson.write(value), now)
        self._store.keep_cards([kept], *also)
        key = hashlib.sha256(repr((PAGE, id_, answer.value, reason, who, now)).encode()).hexdigest()
        report = KeptFeedback(
            key, PAGE, id_, True, "overridden", b"[]", answer.value, ANSWER_SYSTEM, reason, now, now
        )  # fmt: skip
        self._store.add_feedback([report])

    def given(self, exam: str, cards: Sequence[str]) -> dict[str, list[Given]]:
        """The answers to the cards with these keys, by key, the latest first."""
        keys = {card_id(exam, key): key for key in cards}
        found: dict[str, list[Given]] = {}
        for one in self._store.feedback_to(list(keys)):
            known = answered(one.reason, one.reason_system)
            label = LABELS[known] if known else one.outcome
            found.setdefault(keys[one.card], []).append(Given(label, one.received, one.comment))
        return {key: list(reversed(listed)) for key, listed in found.items()}


def card_id(exam: str, key: str) -> str:
    """The same for the same card of the same examination."""
    return str(uuid.uuid5(uuid.UUID(exam.removeprefix("urn:uuid:")), f"{PAGE}\n{key}"))


def carried(card: Card) -> str:
    """What the form of a card carries of it."""
    value = {
        "key": card.key,
        "rules": list(dict.fromkeys(c.rule.id for c in card.conclusions)),
        "entries": list(dict.fromkeys(entry_digest(c) for c in card.conclusions)),
        "combinations": list(
            dict.fromkeys(combination_digest(c) for c in card.conclusions if may_be_true(c))
        ),
    }
    return fhirjson.write(value).decode()


def read_carried(text: str, book: Rulebook) -> Carried | None:
    """The same read back, from whoever sent it; None where it is none of ours."""
    value, issues = fhirjson.read(text.encode("utf-8", "replace"))
    if has_errors(issues) or not isinstance(value, dict):
        return None
    names = ("rules", "entries", "combinations")
    rules, entries, combinations = (_texts(value.get(name)) for name in names)
    key = value.get("key")
    sound = isinstance(key, str) and all(map(_DIGEST.fullmatch, (key, *entries, *combinations)))
    if not sound or not isinstance(key, str) or not rules or not set(rules) <= set(book.rules):
        return None
    known = [book.rules[rule] for rule in rules]
    urgent = any(rule.tier is Tier.U for rule in known)
    true = combinations and not urgent and any(rule.strength is not Strength.HARD for rule in known)
    offered = tuple(Answer) if true else tuple(one for one in Answer if one is not Answer.TRUE_IN_PATIENT)
    return Carried(key, rules, entries, combinations, urgent, (Answer.LOOKED_AGAIN,) if urgent else offered)


def _texts(value: object) -> tuple[str, ...]:
    listed = value if isinstance(value, list) and len(value) <= _MOST else []
    return tuple(one for one in listed if isinstance(one, str))
