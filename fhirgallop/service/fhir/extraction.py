"""QuestionnaireResponse/$extract: the resources that a form's answers are; nothing is stored.

Source: HL7 Structured Data Capture (SDC) 4.0.0, operation QuestionnaireResponse-extract. What is found comes
as a transaction Bundle, to be sent wherever it shall be kept.
"""

from __future__ import annotations

import uuid
from collections.abc import Mapping, Sequence
from datetime import datetime
from typing import Any, Final

from fhirgallop.codes import fhirjson, systems
from fhirgallop.conformance.validator import validate
from fhirgallop.observations import text
from fhirgallop.observations.bundle import instant, transaction
from fhirgallop.observations.editions import EDITIONS, Edition
from fhirgallop.observations.extract import extract
from fhirgallop.observations.identity import identity_of
from fhirgallop.observations.provenance import CONVERSION_TAG
from fhirgallop.outcome import has_errors, operation_outcome, ordered
from fhirgallop.service.answers import RefusalError, refusal
from fhirgallop.service.fhir import form_definitions, form_templates, parameters
from fhirgallop.service.fhir.form_definitions import from_definitions
from fhirgallop.service.fhir.form_templates import from_templates
from fhirgallop.service.fhir.parameters import Given, Part, one
from fhirgallop.version import VERSION

KNOWN: Final = {"questionnaire-response": "Resource", "questionnaire": "Resource"}
_BESIDE: Final = (*form_definitions.WAYS, *form_templates.WAYS)
_NAMESPACE: Final = uuid.uuid5(uuid.NAMESPACE_URL, systems.BASE + "/extract-provenance")
_ASSEMBLER: Final = {
    "coding": [{"system": systems.PROVENANCE_AGENT, "code": "assembler", "display": "Assembler"}]
}
_AUTHOR: Final = {"coding": [{"system": systems.PROVENANCE_AGENT, "code": "author", "display": "Author"}]}


def extracted(given: Given, edition: Edition, now: datetime) -> bytes:
    """The answer of the operation: `return`, where anything was found, and `issues`.

    Raises:
        RefusalError: 400 where the response or its form is missing, 422 where it cannot be extracted, or
            what was extracted does not conform.
    """
    response = one(given, "questionnaire-response")
    if response is None:
        said = "Send the response as the parameter questionnaire-response."
        raise refusal(400, "required", "extract-response", said)
    questionnaire = one(given, "questionnaire") or _contained(response)
    observations, issues = extract(response, questionnaire, edition=edition, beside=_BESIDE)
    entries: list[dict[str, Any]] = []
    if not has_errors(issues):
        for way in (from_definitions, from_templates):
            made, more = way(response, questionnaire, edition)
            entries += made
            issues += more
    if entries and not observations:
        issues = [issue for issue in issues if issue.rule != "sdc-nothing-to-extract"]
    bundle = None
    if (observations or entries) and not has_errors(issues):
        bundle = transaction({identity_of(made): made for made in observations})
        bundle["entry"] += entries
        bundle["entry"].append(_provenance(response, bundle["entry"], edition, now))
        issues += validate(bundle, edition)
    issues = ordered(issues)
    if has_errors(issues):
        raise RefusalError(422, issues)
    parts: list[Part] = [("return", "resource", bundle)] if bundle else []
    if issues or not parts:
        parts.append(("issues", "resource", operation_outcome(issues)))
    return parameters.write(parts)


def _contained(response: Mapping[str, Any]) -> dict[str, Any]:
    """The form that a response brings along."""
    written = response.get("questionnaire")
    contained = response.get("contained")
    for held in contained if isinstance(contained, list) else ():
        if isinstance(held, dict) and written == f"#{held.get('id')}":
            return held
    said = "The form is not known here; send it as the parameter questionnaire."
    raise refusal(422, "not-found", "extract-questionnaire", said)


def _provenance(
    response: Mapping[str, Any], entries: Sequence[Mapping[str, Any]], edition: Edition, now: datetime
) -> dict[str, Any]:
    """Where the Observations come from; the same response gives the same one."""
    tag = str(uuid.uuid5(_NAMESPACE, fhirjson.write([edition, response]).decode()))
    targets = [str(entry["fullUrl"]) for entry in entries]
    author = response.get("author")
    agents = [{"type": _AUTHOR, "who": author}] if isinstance(author, Mapping) else []
    found: dict[str, Any] = {
        "resourceType": "Provenance",
        "meta": {"tag": [{"system": CONVERSION_TAG, "code": tag}]},
        "text": text.narrative(f"Extracted by fhirgallop {text.escaped(VERSION)} from a form."),
        "target": [{"reference": target} for target in targets],
    }
    if EDITIONS[edition].provenance_names_patient:
        found["patient"] = response["subject"]
    found["recorded"] = instant(now)
    found["agent"] = [*agents, {"type": _ASSEMBLER, "who": {"display": f"fhirgallop {VERSION}"}}]
    found["entity"] = [{"role": "source", "what": _what(response)}]
    return {
        "fullUrl": f"urn:uuid:{tag}",
        "resource": found,
        "request": {"method": "POST", "url": "Provenance", "ifNoneExist": f"_tag={CONVERSION_TAG}|{tag}"},
    }


def _what(response: Mapping[str, Any]) -> dict[str, Any]:
    if response.get("id"):
        return {"reference": f"QuestionnaireResponse/{response['id']}"}
    written = response.get("identifier")
    own = written[0] if isinstance(written, list) and written else written
    named = {"identifier": own} if isinstance(own, Mapping) else {}
    return {"type": "QuestionnaireResponse", **named, "display": "The form as it was answered"}
