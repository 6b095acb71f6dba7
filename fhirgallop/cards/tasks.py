"""What a card offers to do: Tasks to record today's rhythm, or to look again; never a changed finding.

Sources: CDS Hooks 2.0.1, "Suggestion", "Action" and "System Action"; FHIR R4 Task (intent proposal).
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any, Final

from fhirgallop.cards import words
from fhirgallop.cards.card import Card
from fhirgallop.cards.frame import Frame
from fhirgallop.cards.today import Held
from fhirgallop.reasoning.conclusion import Conclusion

RHYTHM: Final = "rhythm."
# A rhythm on the problem list says nothing of today's either.
_RHYTHMS: Final = (RHYTHM, "condition.atrial-fibrillation", "condition.atrial-flutter")
_DAY: Final = 86_400
_RECORD: Final = "Record today's rhythm"
_RECORD_RHYTHM: Final = f"{_RECORD}, from a tracing or by the examiner."


def suggestions(card: Card, held: Held, frame: Frame) -> Iterator[dict[str, Any]]:
    """What a card offers to do; the client's user chooses any of it."""
    if not frame.acts and any(asks_for_rhythm(c) for c in card.conclusions):
        yield rhythm_suggestion(frame, card.key)
    for look in card.looks:
        if look.item.of_exam:
            label = words.label(look.item.id)
            say = f"Mark for another look: {label}"
            told = f"{say} ({look.action}). The entry itself is not changed."
            place = held.own.names.get(look.item.id, "")
            yield _suggestion(frame, (card.key, look.item.key), say, told, place)


def asks_for_rhythm(conclusion: Conclusion) -> bool:
    """True when it rests on a rhythm that is not today's, or would need one that nobody recorded."""
    grounds = (g for g in (*conclusion.subject, *conclusion.grounds) if not g.item.of_exam)
    old = (g.item for g in grounds if g.stale or g.item.age is None or abs(g.item.age) > _DAY)
    ids = (*conclusion.unknown, *(item.id for item in old))
    return any(id_.startswith(_RHYTHMS) for id_ in ids)


def rhythm_suggestion(frame: Frame, key: str) -> dict[str, Any]:
    """The suggestion to record today's rhythm."""
    return _suggestion(frame, (key, "rhythm"), _RECORD, _RECORD_RHYTHM)


def system_action(frame: Frame) -> dict[str, Any]:
    """The same as something that the client does by itself."""
    return _task(frame, ("system", "rhythm"), _RECORD_RHYTHM)


def _suggestion(frame: Frame, key: tuple[str, ...], label: str, told: str, focus: str = "") -> dict[str, Any]:
    return {
        "label": label,
        "uuid": frame.id(*key, "suggestion"),
        "actions": [_task(frame, key, told, focus)],
    }


def _task(frame: Frame, key: tuple[str, ...], told: str, focus: str = "") -> dict[str, Any]:
    """An action that creates a Task (FHIR R4, intent proposal): something to do, never a changed finding."""
    task: dict[str, Any] = {
        "resourceType": "Task",
        "id": frame.id(*key, "task"),
        "status": "requested",
        "intent": "proposal",
        "description": told,
        "for": {"reference": f"Patient/{frame.patient}"},
    }
    if focus:
        task["focus"] = {"reference": focus}
    if frame.encounter:
        task["encounter"] = {"reference": f"Encounter/{frame.encounter}"}
    return {"type": "create", "description": told, "resource": task}
