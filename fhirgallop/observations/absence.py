"""Presence as FHIR: absent, uncertain, not examined and could-not-be-examined are four different outputs.

| presence       | value                       | dataAbsentReason | interpretation of a pathological sign |
|----------------|-----------------------------|------------------|---------------------------------------|
| present        | SNOMED CT 52101004 Present  |                  | A                                     |
| absent         | SNOMED CT 2667000 Absent    |                  | N                                     |
| uncertain      | our own code                |                  | IND                                   |
| not examined   |                             | not-performed    |                                       |
| not examinable |                             | unsupported      |                                       |

Sources: FHIR R4 Observation 10.1.4.4.3 pattern 3 and 10.1.4.6 (a coded value rather than a boolean, which
cannot say "uncertain"); code system data-absent-reason; v3 ObservationInterpretation. R4's text names a
reason `clinical-finding` that its code system does not hold: it is not used.
"""

from __future__ import annotations

from typing import Any, Final

from fhirgallop.codes import systems
from fhirgallop.exam.presence import Presence

_REASON: Final = {
    Presence.NOT_EXAMINED: ("not-performed", "Not Performed"),
    Presence.NOT_EXAMINABLE: ("unsupported", "Unsupported"),
}
_INTERPRETATION: Final = {
    "A": "Abnormal",
    "N": "Normal",
    "IND": "Indeterminate",
}
_OF_PATHOLOGICAL_SIGN: Final = {Presence.PRESENT: "A", Presence.ABSENT: "N"}


def data_absent_reason(presence: Presence, label: str, coding: dict[str, str], reason: str) -> dict[str, Any]:
    """The dataAbsentReason of a finding that was not looked for or could not be."""
    code, display = _REASON[presence]
    standard = {"system": systems.DATA_ABSENT_REASON, "code": code, "display": display}
    return {"coding": [standard, coding], "text": f"{label}: {reason}" if reason else label}


def unknown_part() -> dict[str, Any]:
    """The dataAbsentReason of a component that the sender left out (the diastolic pressure alone, say)."""
    return {"coding": [{"system": systems.DATA_ABSENT_REASON, "code": "unknown", "display": "Unknown"}]}


def interpretation(code: str) -> list[dict[str, Any]]:
    """The interpretation element for one code."""
    coding = {"system": systems.INTERPRETATION, "code": code, "display": _INTERPRETATION[code]}
    return [{"coding": [coding]}]


def interpretation_code(presence: Presence, pathological: str) -> str:
    """Interpretation that follows from presence: absence of a pathological sign is normal, not negative."""
    if presence is Presence.UNCERTAIN:
        return "IND"
    return _OF_PATHOLOGICAL_SIGN.get(presence, "") if pathological == "yes" else ""


def not_performed(label: str) -> dict[str, Any]:
    """The dataAbsentReason of a manoeuvre that was not done."""
    code, display = _REASON[Presence.NOT_EXAMINED]
    return {
        "coding": [{"system": systems.DATA_ABSENT_REASON, "code": code, "display": display}],
        "text": label,
    }
