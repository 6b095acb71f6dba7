"""How the OpenAPI description speaks of the FHIR addresses."""

from __future__ import annotations

from typing import Annotated, Any, Final

from fastapi import Path

from fhirgallop.service import answers
from fhirgallop.service.fhir.address import EditionPath

FORM: Final = "application/x-www-form-urlencoded"
EditionName = Annotated[EditionPath, Path(description="FHIR edition.")]
ResourceId = Annotated[str, Path(max_length=200, description="FHIR id.")]

RESOURCE_BODY: Final[dict[str, Any]] = {
    "requestBody": {
        "required": True,
        "content": {kind: {"schema": {"type": "object"}} for kind in (answers.FHIR_JSON, answers.PLAIN_JSON)},
    }
}
FORM_BODY: Final[dict[str, Any]] = {"requestBody": {"content": {FORM: {"schema": {"type": "object"}}}}}
STATUSES: Final[dict[int | str, dict[str, Any]]] = {
    200: {"description": "What was asked for.", "content": {answers.FHIR_JSON: {}, answers.PLAIN_JSON: {}}},
    304: {"description": "It is as the client knows it."},
    **answers.REFUSALS,
}
CHANGED: Final[dict[int | str, dict[str, Any]]] = {
    200: {"description": "Kept; or nothing had to be.", "content": {answers.FHIR_JSON: {}}},
    201: {"description": "Created.", "content": {answers.FHIR_JSON: {}}},
    **answers.REFUSALS,
}
