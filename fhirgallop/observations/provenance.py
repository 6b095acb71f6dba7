"""Provenance of one conversion: who said it, what it was read from, and by which version of which map."""

from __future__ import annotations

from typing import Any, Final

from fhirgallop.codes import systems
from fhirgallop.exam.exam import Exam
from fhirgallop.observations import text
from fhirgallop.observations.build import Shared
from fhirgallop.observations.editions import EditionTraits
from fhirgallop.version import VERSION

CONVERSION_TAG: Final = systems.BASE + "/CodeSystem/conversion"
TEMPLATE_MAP: Final = systems.BASE + "/template-map"

_FORM_NAMES: Final = {
    "json": "examination record (JSON)",
    "table": "examination record (table row)",
    "oru": "HL7 v2 ORU message",
    "questionnaire-response": "QuestionnaireResponse",
}


def provenance(
    exam: Exam, form: str, shared: Shared, targets: list[str], traits: EditionTraits, tag: str
) -> dict[str, Any]:
    """The Provenance of all `targets`.

    Args:
        exam: what was converted.
        form: intake form of the record.
        shared: the common parts of the exam's resources.
        targets: full URLs of the resources made.
        traits: what the edition allows.
        tag: identity of this very conversion, by which a receiver creates it only once.
    """
    record_id: dict[str, str] = {"value": exam.identifier}
    if exam.identifier_system:
        record_id = {"system": exam.identifier_system, "value": exam.identifier}
    entities = [
        {
            "role": "source",
            "what": {"identifier": record_id, "display": _FORM_NAMES.get(form, "examination record")},
        }
    ]
    if exam.map:
        version = f"{exam.map.name}|{exam.map.version}"
        what = {
            "identifier": {"system": TEMPLATE_MAP, "value": version},
            "display": f"template map {exam.map.name}, version {exam.map.version}",
        }
        entities.append({"role": "source", "what": what})
    if any(entry.words for entry in exam.entries):
        entities.append(
            {"role": "source", "what": {"display": "line of text in that record, read by wordings"}}
        )
    found: dict[str, Any] = {
        "resourceType": "Provenance",
        "meta": {
            "profile": [systems.profile("exam-provenance")],
            "tag": [{"system": CONVERSION_TAG, "code": tag.removeprefix("urn:uuid:")}],
        },
        "text": text.narrative(f"Coded by fhirgallop {text.escaped(VERSION)} from the sender's record."),
        "target": [{"reference": target} for target in targets],
    }
    if traits.provenance_names_patient:
        found["patient"] = shared.subject
        if shared.encounter:
            found["encounter"] = shared.encounter
    found["recorded"] = shared.issued
    found["agent"] = [
        {"type": _agent("author", "Author"), "who": shared.performer[0]},
        {"type": _agent("assembler", "Assembler"), "who": {"display": f"fhirgallop {VERSION}"}},
    ]
    found["entity"] = entities
    return found


def _agent(code: str, display: str) -> dict[str, Any]:
    return {"coding": [{"system": systems.PROVENANCE_AGENT, "code": code, "display": display}]}
