"""POST /fhir/{edition}/$validate: what is wrong with a FHIR resource.

Source: FHIR R4 operation Resource-validate. The resource comes as it is, or in a Parameters resource beside a
profile; the answer is one OperationOutcome, with status 200 whenever the check could be run.
"""

from __future__ import annotations

from typing import Annotated, Any, Final, Literal

from fastapi import APIRouter, Depends, Path, Query, Request
from starlette.concurrency import run_in_threadpool
from starlette.responses import Response

from fhirgallop.codes import fhirjson
from fhirgallop.conformance.registry import registry
from fhirgallop.conformance.validator import validate
from fhirgallop.outcome import Issue, has_errors, ordered
from fhirgallop.service import answers, requests
from fhirgallop.service.auth.needs import needs
from fhirgallop.settings import Settings

router = APIRouter(tags=["FHIR"])

EditionPath = Literal["r4", "r4b", "r5"]
_NAMES: Final = {"r4": "R4", "r4b": "R4B", "r5": "R5"}
_MODES: Final = ("create", "update", "delete", "profile")
_DESCRIBED: Final[dict[str, Any]] = {
    "requestBody": {
        "required": True,
        "content": {kind: {"schema": {"type": "object"}} for kind in (answers.FHIR_JSON, answers.PLAIN_JSON)},
    }
}
_STATUSES: Final[dict[int | str, dict[str, Any]]] = {
    200: {"description": "The check was run; the OperationOutcome says what it found."},
    **answers.REFUSALS,
}
Profile = Annotated[str | None, Query(description="Canonical of a profile to be met.", max_length=2000)]
Edition_ = Annotated[EditionPath, Path(description="FHIR edition.")]


@router.post(
    "/fhir/{edition}/$validate",
    summary="Check a FHIR resource",
    description="The body is a resource, or Parameters with `resource` and perhaps `profile`.",
    openapi_extra=_DESCRIBED,
    dependencies=[Depends(needs(token=True, roles=("informatician",)))],
    responses=_STATUSES,
)
async def validate_any(request: Request, edition: Edition_, profile: Profile = None) -> Response:
    """Judges a resource of any type."""
    return await _judged(request, edition, profile, "")


@router.post(
    "/fhir/{edition}/{resource_type}/$validate",
    summary="Check a FHIR resource of one type",
    description="The same, and a resource of another type is refused.",
    openapi_extra=_DESCRIBED,
    dependencies=[Depends(needs(token=True, roles=("informatician",)))],
    responses=_STATUSES,
)
async def validate_one_type(
    request: Request,
    edition: Edition_,
    resource_type: Annotated[str, Path(max_length=64, description="Resource type.")],
    profile: Profile = None,
) -> Response:
    """Judges a resource that must be of the type in the address."""
    if resource_type not in registry(_NAMES[edition]).edition.resources:
        raise answers.refusal(404, "not-supported", "http-unknown-type", "There is no such resource type.")
    return await _judged(request, edition, profile, resource_type)


async def _judged(request: Request, edition: EditionPath, profile: str | None, wanted: str) -> Response:
    requests.only_known(request, ("profile",))
    requests.accepted(
        request, (answers.FHIR_JSON, answers.PLAIN_JSON)
    )  # refuses who takes no JSON back; the answer is FHIR either way
    requests.fhir_content(request)
    settings: Settings = request.app.state.settings
    body = await requests.body(request, settings.max_body)
    issues = await run_in_threadpool(_judge, body, _NAMES[edition], profile, wanted)
    return answers.outcome_answer(200, issues)


def _judge(body: bytes, edition: str, profile: str | None, wanted: str) -> list[Issue]:
    value, issues = fhirjson.read(body)
    if has_errors(issues) or not isinstance(value, dict):
        # the judge says what is wrong with the text, and where
        raise answers.RefusalError(400, validate(body, edition))
    resource: bytes | dict[str, Any] = body
    profiles = [profile] if profile else []
    if value.get("resourceType") == "Parameters" and wanted != "Parameters":
        resource, asked = _unpacked(value)
        profiles += asked
        value = resource
    if not all(map(registry(edition).profile, profiles)):
        text = "A profile that was asked for is not known here; load its package, or leave it out."
        raise answers.refusal(422, "not-found", "http-unknown-profile", text)
    found = validate(resource, edition, profiles)
    if wanted and value.get("resourceType") != wanted:
        text = f"The address is for {wanted}, the resource is of another type; send it to its own address."
        found = [*found, Issue("error", "invalid", "http-other-type", text)]
    return ordered(found)


def _unpacked(parameters: dict[str, Any]) -> tuple[dict[str, Any], list[str]]:
    """The resource and the profiles that a Parameters resource holds."""
    resource: dict[str, Any] | None = None
    profiles: list[str] = []
    entries = parameters.get("parameter")
    for entry in entries if isinstance(entries, list) else ():
        if not isinstance(entry, dict):
            continue
        name = entry.get("name")
        if name == "resource" and isinstance(entry.get("resource"), dict):
            resource = entry["resource"]
        elif name == "profile":
            given = entry.get("valueUri", entry.get("valueCanonical"))
            profiles += [given] if isinstance(given, str) else []
        elif name == "mode" and entry.get("valueCode") not in _MODES[:1]:
            text = "Only the mode create is served here (nothing is stored yet); leave mode out."
            raise answers.refusal(400, "not-supported", "http-validate-mode", text)
    if resource is None:
        text = "The Parameters hold no resource; add a parameter named resource."
        raise answers.refusal(400, "required", "http-validate-resource", text)
    return resource, profiles
