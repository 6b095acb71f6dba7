"""Conditions as facts: a diagnosis is a problem that someone asserted, never a rhythm seen today.

Sources: FHIR R4 and R5 Condition (verificationStatus, clinicalStatus, abatement[x]; con-4: what has abated is
not active).
"""

from __future__ import annotations

from typing import Final

from fhirgallop.chart.elements import Element, code_words, codes, value_names
from fhirgallop.chart.gather import Found
from fhirgallop.chart.known import known
from fhirgallop.chart.reading import Reading, grouped, modified
from fhirgallop.chart.tables import Statement
from fhirgallop.chart.times import Times
from fhirgallop.exam.context import Fact, Source, State

_REFUTED: Final = frozenset({"refuted", "entered-in-error"})
_DOUBTED: Final = frozenset({"unconfirmed", "provisional", "differential"})
_ACTIVE: Final = frozenset({"active", "recurrence", "relapse"})
_OVER: Final = frozenset({"inactive", "remission", "resolved"})


def read_condition(found: Found, reading: Reading) -> None:
    """Adds the facts a Condition states."""
    condition = found.resource
    said = grouped(reading.statements("condition", codes(condition.get("code"))))
    if not said:
        reading.unknown += 1
        return
    if modified(condition):
        words = "An extension may turn the meaning of this round; nothing of it is used."
        reading.log.add("warning", "not-supported", "chart-modifier", words, found.place)
        return
    time = reading.times.of(condition, "onset", found.place)
    if time is None:
        return
    state, low_trust = _state(condition, reading, found.place)
    for statement in said.values():
        stated = _stated(statement, state, reading, found.place)
        if stated is None:
            continue
        definition = known()[statement.id]
        described = reading.qualifiers(
            definition, codes(condition.get("severity")), codes(condition.get("bodySite"))
        )
        reading.facts.append(
            Fact(
                statement.id,
                stated,
                Source.PROBLEM_LIST,
                statement.answers,
                qualifiers=tuple(dict.fromkeys((*statement.qualifiers, *described))),
                time=time,
                encounter=reading.encounter(found),
                reference=found.name,
                low_trust=low_trust,
            )
        )


def _state(condition: Element, reading: Reading, place: str) -> tuple[State, bool]:
    """How the diagnosis stands, and whether it is to be trusted less."""
    verified = code_words(condition.get("verificationStatus"))
    clinical = code_words(condition.get("clinicalStatus"))
    if not verified.isdisjoint(_REFUTED):
        return State.REFUTED, False
    if not verified.isdisjoint(_DOUBTED):
        return State.UNCERTAIN, False
    if (verified and "confirmed" not in verified) or ("verificationStatus" in condition and not verified):
        words = "The verification status is not one of FHIR's; the diagnosis counts as unconfirmed."
        reading.log.add("warning", "code-invalid", "chart-status", words, f"{place}.verificationStatus")
        return State.UNCERTAIN, False
    if _abated(condition, reading.times):
        if not clinical.isdisjoint(_ACTIVE):
            words = (
                "The condition has abated and is called active; it counts as history. Correct one of the two."
            )
            reading.log.add("warning", "invariant", "con-4", words, place)
        return State.HISTORY, False
    if not clinical.isdisjoint(_OVER):
        return State.HISTORY, False
    if not clinical.isdisjoint(_ACTIVE):
        return State.PRESENT, False
    if clinical or "clinicalStatus" in condition:
        words = "The clinical status does not say whether this is active; it counts as uncertain."
        reading.log.add("information", "code-invalid", "chart-status", words, f"{place}.clinicalStatus")
        return State.UNCERTAIN, False
    words = "There is no clinical status; the diagnosis is used with less trust. Send one."
    reading.log.add("information", "incomplete", "con-3", words, place)
    return State.PRESENT, True


def _abated(condition: Element, times: Times) -> bool:
    """True when an end is given that does not lie in the future."""
    names = value_names(condition, "abatement")
    if not names:
        return False
    value = condition[names[0]]
    if names[0] == "abatementBoolean":
        return value is True
    if names[0] == "abatementDateTime" and isinstance(value, str):
        parsed = value[:10]
        return parsed <= times.now.isoformat()[: len(parsed)]
    return True


def _stated(statement: Statement, state: State, reading: Reading, place: str) -> State | None:
    """The state of what the code says; one that itself says absent or history only when affirmed."""
    if statement.contextual and state is not State.PRESENT:
        words = "A code that itself says absent or history is denied, doubted or past here; it is not used."
        reading.log.add("warning", "business-rule", "chart-double-negative", words, place)
        return None
    return state if statement.present else State.ABSENT
