"""Every status code of the standard, and what a chart makes of it.

Source: the required value sets of FHIR R4 4.0.1, R4B 4.3.0 and R5 5.0.0 (condition-ver-status,
condition-clinical, observation-status, diagnostic-report-status, event-status, device-status,
device-statement-status, deviceusage-status, deviceassociation-status), read from the published definitions in
profiles/base; a code that a later edition adds fails here until somebody decides what it means.
"""

from __future__ import annotations

from datetime import datetime
from typing import Any

import pytest

from fhirgallop.chart.read import read_chart
from fhirgallop.codes import systems
from fhirgallop.conformance.registry import registry
from fhirgallop.exam.exam import Exam, Party
from fhirgallop.exam.moment import Moment

NOW = datetime.fromisoformat("2026-11-30T10:30:00+01:00")
EXAM = Exam(Party("p1", is_fhir_id=True), "x", "", Moment("2026-11-30T10:00:00+01:00"), ())
SUBJECT = {"reference": "Patient/p1"}
NOTHING = "nothing"
MEANING: dict[str, dict[str, str]] = {
    "condition-ver-status": {
        "confirmed": "present", "unconfirmed": "uncertain", "provisional": "uncertain",
        "differential": "uncertain", "refuted": "refuted", "entered-in-error": "refuted",
    },
    "condition-clinical": {
        "active": "present", "recurrence": "present", "relapse": "present", "inactive": "history",
        "remission": "history", "resolved": "history", "unknown": "uncertain",
    },
    "observation-status": {
        "registered": NOTHING, "preliminary": "present, less trusted", "final": "present",
        "amended": "present", "corrected": "present", "cancelled": NOTHING, "entered-in-error": NOTHING,
        "unknown": NOTHING,
    },
    "diagnostic-report-status": {
        "registered": NOTHING, "partial": "present, less trusted", "preliminary": "present, less trusted",
        "modified": "present, less trusted", "final": "present", "amended": "present",
        "corrected": "present", "appended": "present", "cancelled": NOTHING, "entered-in-error": NOTHING,
        "unknown": NOTHING,
    },
    "event-status": {
        "preparation": "uncertain", "in-progress": "present", "not-done": NOTHING, "on-hold": "uncertain",
        "stopped": "uncertain", "completed": "present", "entered-in-error": "refuted", "unknown": "uncertain",
    },
    "device-status": {
        "active": "present", "inactive": "history", "entered-in-error": "refuted", "unknown": "uncertain",
    },
    "device-statement-status": {
        "active": "present", "completed": "history", "entered-in-error": "refuted", "intended": "uncertain",
        "stopped": "history", "on-hold": "present",
    },
    "deviceusage-status": {
        "active": "present", "completed": "history", "not-done": NOTHING, "entered-in-error": "refuted",
        "intended": "uncertain", "stopped": "history", "on-hold": "present",
    },
    "deviceassociation-status": {
        "implanted": "present", "attached": "present", "explanted": "history", "entered-in-error": "refuted",
        "unknown": "uncertain",
    },
}  # fmt: skip


def coded(code: str) -> dict[str, Any]:
    return {"coding": [{"code": code}]}


def snomed(code: str) -> dict[str, Any]:
    return {"coding": [{"system": systems.SNOMED, "code": code}]}


VALVE = {"resourceType": "Device", "id": "d", "type": snomed("17107009")}


def resources(value_set: str, code: str) -> list[dict[str, Any]]:
    """A chart whose one statement has that status."""
    condition = {"resourceType": "Condition", "subject": SUBJECT, "code": snomed("79619009")}
    use = {"device": {"reference": "Device/d"}, "status": code}
    return {
        "condition-ver-status": [
            {**condition, "verificationStatus": coded(code), "clinicalStatus": coded("active")}
        ],
        "condition-clinical": [
            {**condition, "verificationStatus": coded("confirmed"), "clinicalStatus": coded(code)}
        ],
        "observation-status": [
            {"resourceType": "Observation", "subject": SUBJECT, "status": code, "code": snomed("4592006"),
             "valueBoolean": True}
        ],
        "diagnostic-report-status": [
            {"resourceType": "DiagnosticReport", "subject": SUBJECT, "status": code,
             "conclusionCode": [snomed("79619009")]}
        ],
        "event-status": [
            {"resourceType": "Procedure", "subject": SUBJECT, "status": code,
             "code": {"coding": [{"system": systems.FINDINGS, "code": "procedure.cardioversion"}]}}
        ],
        "device-status": [{**VALVE, "patient": SUBJECT, "status": code}],
        "device-statement-status": [VALVE, {"resourceType": "DeviceUseStatement", "subject": SUBJECT, **use}],
        "deviceusage-status": [
            VALVE,
            {"resourceType": "DeviceUsage", "patient": SUBJECT, "status": code,
             "device": {"reference": {"reference": "Device/d"}}},
        ],
        "deviceassociation-status": [
            VALVE, {"resourceType": "DeviceAssociation", "subject": SUBJECT, **use, "status": coded(code)}
        ],
    }[value_set]  # fmt: skip


@pytest.mark.parametrize("name", MEANING)
def test_every_published_code_has_a_meaning_here_and_no_other(name: str) -> None:
    published: set[str] = set()
    for edition in ("R4", "R4B", "R5"):
        value_set = registry(edition).value_set(f"http://hl7.org/fhir/ValueSet/{name}")
        if value_set is not None:
            published |= {code for codes in value_set.systems.values() for code in codes}
    assert published == set(MEANING[name])


@pytest.mark.parametrize(
    ("name", "code"), [(name, code) for name, codes in MEANING.items() for code in codes]
)
def test_what_a_chart_makes_of_it(name: str, code: str) -> None:
    facts = read_chart(resources(name, code), EXAM, NOW).context.facts
    said = [f"{f.state.value}{', less trusted' if f.low_trust else ''}" for f in facts]
    assert said == ([] if MEANING[name][code] == NOTHING else [MEANING[name][code]])


def test_absent_reasons_never_make_a_finding_present() -> None:
    """FHIR R4 data-absent-reason: whatever the reason, nothing was found."""
    for edition in ("R4", "R4B", "R5"):
        value_set = registry(edition).value_set("http://hl7.org/fhir/ValueSet/data-absent-reason")
        assert value_set is not None
        for system, reasons in value_set.systems.items():
            for reason in reasons:
                (sign,) = resources("observation-status", "final")
                sign = {k: v for k, v in sign.items() if k != "valueBoolean"}
                sign["dataAbsentReason"] = {"coding": [{"system": system, "code": reason}]}
                assert read_chart([sign], EXAM, NOW).context.facts == ()
