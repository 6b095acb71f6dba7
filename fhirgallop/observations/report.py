"""The panel that holds the findings together, and the DiagnosticReport around it."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any, Final

from fhirgallop.codes import systems
from fhirgallop.exam.catalogue import Catalogue
from fhirgallop.exam.exam import Exam
from fhirgallop.observations import text
from fhirgallop.observations.build import Shared
from fhirgallop.observations.identity import identifier

PANEL_ID: Final = "exam.cardiovascular"
_REPORT_LABEL: Final = "Heart examination"
# LOINC 10200-4 "Physical findings of Heart Narrative"
_REPORT_CODE: Final = {
    "system": systems.LOINC,
    "code": "10200-4",
    "display": "Physical findings of Heart Narrative",
}


def panel(
    catalogue: Catalogue, shared: Shared, members: Sequence[str], *, snomed: bool
) -> tuple[str, dict[str, Any]]:
    """(identity, Observation) that names every finding as a member and has no value of its own."""
    definition = catalogue.findings[PANEL_ID]
    urn = shared.identities.of(PANEL_ID)
    codings = [c.as_fhir() for c in definition.codings if snomed or c.system != systems.SNOMED]
    category = {"system": systems.OBSERVATION_CATEGORY, "code": "exam", "display": "Exam"}
    resource: dict[str, Any] = {
        "resourceType": "Observation",
        "meta": {"profile": [systems.profile("exam-panel")]},
        "text": text.narrative(
            f"{text.escaped(definition.label)}: {len(members)} findings",
            withdrawn=shared.status == "entered-in-error",
        ),
        "identifier": identifier(urn),
        "status": shared.status,
        "category": [{"coding": [category]}],
        "code": {"coding": codings, "text": definition.label},
        **_common(shared),
        "performer": shared.performer,
    }
    if members:
        resource["hasMember"] = [{"reference": member} for member in members]
    return urn, resource


def report(
    exam: Exam, shared: Shared, panel_urn: str, findings: Sequence[dict[str, Any]]
) -> tuple[str, dict[str, Any]]:
    """(identity, DiagnosticReport) whose narrative says in words what the coded findings say."""
    urn = shared.identities.of("report")
    lines = [
        _inner(finding["text"]["div"]) for finding in findings if finding["status"] != "entered-in-error"
    ]
    notes = [text.escaped(words) for note in exam.notes if (words := text.plain(note))]
    told = _list_of(lines, notes)
    resource: dict[str, Any] = {
        "resourceType": "DiagnosticReport",
        "meta": {"profile": [systems.profile("exam-report")]},
        "text": text.taken_back(told) if shared.status == "entered-in-error" else told,
        "identifier": identifier(urn),
        "status": shared.status,
        "code": {"coding": [_REPORT_CODE], "text": _REPORT_LABEL},
        **_common(shared),
        "performer": shared.performer,
        "result": [{"reference": panel_urn}],
    }
    return urn, resource


def _common(shared: Shared) -> dict[str, Any]:
    found: dict[str, Any] = {"subject": shared.subject}
    if shared.encounter:
        found["encounter"] = shared.encounter
    found[shared.effective_key] = shared.effective_value
    found["issued"] = shared.issued
    return found


def _inner(div: str) -> str:
    """The words inside a narrative of ours: one paragraph, already escaped."""
    return div[div.index("<p>") + 3 : div.index("</p>")]


def _list_of(lines: Sequence[str], notes: Sequence[str]) -> dict[str, str]:
    items = "".join(f"<li>{line}</li>" for line in lines)
    body = f"<p>{_REPORT_LABEL}</p>" + (f"<ul>{items}</ul>" if items else "")
    body += "".join(f"<p>{note}</p>" for note in notes)
    return {"status": "generated", "div": f'<div xmlns="http://www.w3.org/1999/xhtml">{body}</div>'}
