"""What clients report of the cards they showed.

Source: CDS Hooks 2.0.1, "Feedback" (constraints cds-fb-1 to cds-fb-3). Nothing is derived from silence: a
card that nobody answered is not counted as ignored.
"""

from __future__ import annotations

import hashlib
import re
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime
from typing import Any, Final

from fhirgallop.cards.build import Shown, answered
from fhirgallop.cards.memory import Answer, Memory
from fhirgallop.codes import fhirjson
from fhirgallop.outcome import Issue, has_errors

MAX_ITEMS: Final = 500
MAX_TEXT: Final = 4000
_UUID: Final = re.compile(r"[0-9A-Fa-f]{8}(?:-[0-9A-Fa-f]{4}){3}-[0-9A-Fa-f]{12}", re.ASCII)
# RFC 3339 in UTC, as CDS Hooks asks
_INSTANT: Final = re.compile(
    r"[0-9]{4}-[0-9]{2}-[0-9]{2}T[0-9]{2}:[0-9]{2}:[0-9]{2}(?:\.[0-9]{1,9})?(?:Z|\+00:00)", re.ASCII
)


@dataclass(frozen=True, slots=True)
class Feedback:
    """One report.

    Attributes:
        key: digest of the service and the whole report: the same report sent again has the same key.
        card: uuid of the card.
        outcome: accepted or overridden.
        suggestions: uuids of the suggestions that were accepted.
        reason: code of the override reason; `reason_system` its code system.
        comment: the user's own words; to be guarded as a resource is.
        at: outcomeTimestamp.
    """

    key: str
    card: str
    outcome: str
    suggestions: tuple[str, ...]
    reason: str
    reason_system: str
    comment: str
    at: str

    @property
    def answer(self) -> Answer | None:
        """The answer it gives to our own question, where it gives one."""
        return answered(self.reason, self.reason_system) if self.outcome == "overridden" else None


def read_feedback(value: Any, service: str) -> tuple[list[Feedback], list[Issue]]:
    """Every report of a body, and everything that is wrong with it; with an error, none is to be kept."""
    listed = value.get("feedback") if isinstance(value, dict) else None
    if not isinstance(listed, list) or not listed:
        words = "The body is no object with a feedback array of at least one report."
        return [], [Issue("error", "structure", "hook-feedback", words, field="feedback")]
    if len(listed) > MAX_ITEMS:
        words = f"More than {MAX_ITEMS} reports at once; send fewer at a time."
        return [], [Issue("error", "too-long", "hook-feedback", words, field="feedback")]
    issues: list[Issue] = []
    found: list[Feedback] = []
    for index, one in enumerate(listed):
        faults = list(_faults(one, f"feedback[{index}]"))
        issues += faults
        if not has_errors(faults):
            found.append(_read(one, service))
    return found, issues


def _faults(one: Any, place: str) -> Iterator[Issue]:
    if not isinstance(one, dict):
        yield _fault("structure", "hook-feedback", "A report is no object.", place)
        return
    if not _is_uuid(one.get("card")):
        yield _fault("value", "hook-feedback", "card is missing, or not the uuid of a card.", f"{place}.card")
    outcome = one.get("outcome")
    if outcome not in ("accepted", "overridden"):
        words = "outcome is missing, or neither accepted nor overridden."
        yield _fault("value", "cds-fb-1", words, f"{place}.outcome")
    at = one.get("outcomeTimestamp")
    if not (isinstance(at, str) and _is_instant(at)):
        words = "outcomeTimestamp is no RFC 3339 time in UTC such as 2026-12-01T08:30:00Z."
        yield _fault("value", "hook-feedback", words, f"{place}.outcomeTimestamp")
    if outcome == "accepted":
        yield from _accepted(one.get("acceptedSuggestions"), f"{place}.acceptedSuggestions")
    if one.get("overrideReason") is not None:
        yield from _override(one["overrideReason"], f"{place}.overrideReason")


def _accepted(given: Any, place: str) -> Iterator[Issue]:
    sound = isinstance(given, list) and 0 < len(given) <= MAX_ITEMS
    if not sound or not all(isinstance(one, dict) and _is_uuid(one.get("id")) for one in given):
        words = "acceptedSuggestions must name at least one suggestion by id when the outcome is accepted."
        yield _fault("required", "cds-fb-2", words, place)


def _override(given: Any, place: str) -> Iterator[Issue]:
    reason = given.get("reason") if isinstance(given, dict) else None
    comment = given.get("userComment") if isinstance(given, dict) else None
    coded = isinstance(reason, dict) and all(_is_text(reason.get(name)) for name in ("code", "system"))
    if not (coded or (reason is None and _is_text(comment))) or not (comment is None or _is_text(comment)):
        words = "overrideReason needs reason (with code and system), or userComment, or both."
        yield _fault("required", "cds-fb-3", words, place)


def _fault(code: str, rule: str, words: str, place: str) -> Issue:
    return Issue("error", code, rule, words, field=place)


def _is_uuid(value: Any) -> bool:
    return isinstance(value, str) and _UUID.fullmatch(value) is not None


def _is_text(value: Any) -> bool:
    # PostgreSQL keeps no text with U+0000
    return isinstance(value, str) and 0 < len(value) <= MAX_TEXT and "\0" not in value


def _is_instant(text: str) -> bool:
    if not _INSTANT.fullmatch(text):
        return False
    try:
        datetime.fromisoformat(text)
    except ValueError:
        return False
    return True


def _read(one: Mapping[str, Any], service: str) -> Feedback:
    override: Mapping[str, Any] = one.get("overrideReason") or {}
    reason: Mapping[str, Any] = override.get("reason") or {}
    accepted: Sequence[Mapping[str, Any]] = one["acceptedSuggestions"] if one["outcome"] == "accepted" else ()
    return Feedback(
        hashlib.sha256(service.encode() + b"\n" + fhirjson.write(one)).hexdigest(),
        one["card"].lower(),
        one["outcome"],
        tuple(suggestion["id"].lower() for suggestion in accepted),
        reason.get("code", ""),
        reason.get("system", ""),
        override.get("userComment") or "",
        one["outcomeTimestamp"],
    )


def remembering(memory: Memory, shown: Shown, answer: Answer, *, encounter: str, now: datetime) -> Memory:
    """The memory after an answer to a card that was given out earlier (see `policy.answer`)."""
    memory = memory.answering(encounter, shown.entries)
    if answer is Answer.TRUE_IN_PATIENT and shown.combinations:
        memory = memory.knowing(shown.combinations, now)
    return memory
