"""POST /fhir/{edition}/.../$validate: what is wrong with a FHIR resource.

Source: FHIR R4 operation Resource-validate. The resource comes as it is, or in a Parameters resource beside
mode and profile; the answer is one OperationOutcome, with status 200 whenever the check could be run.
"""

from __future__ import annotations

from typing import Annotated

from fastapi import APIRouter, Depends, Path, Query, Request
from starlette.concurrency import run_in_threadpool
from starlette.responses import Response

from fhirgallop.conformance.registry import registry
from fhirgallop.service import answers, requests
from fhirgallop.service.auth.needs import needs
from fhirgallop.service.fhir.address import NAMES
from fhirgallop.service.fhir.described import RESOURCE_BODY, EditionName, ResourceId
from fhirgallop.service.fhir.negotiation import GENERAL, sent_fhir, wish
from fhirgallop.service.fhir.validating import Question, judge
from fhirgallop.settings import Settings

router = APIRouter(tags=["FHIR"], dependencies=[Depends(needs(token=True, roles=("informatician",)))])

_STATUSES = {
    200: {"description": "The check was run; the OperationOutcome says what it found."},
    **answers.REFUSALS,
}
TypeName = Annotated[str, Path(max_length=64, description="Resource type.")]
Profile = Annotated[str | None, Query(description="Canonical of a profile to be met.", max_length=2000)]
Mode = Annotated[str | None, Query(description="create, update, delete or profile.", max_length=20)]


@router.post(
    "/fhir/{edition}/$validate",
    summary="Check a FHIR resource",
    description="The body is a resource, or Parameters with `resource` and perhaps `mode` and `profile`.",
    openapi_extra=RESOURCE_BODY,
    responses=_STATUSES,
)
async def validate_any(
    request: Request, edition: EditionName, profile: Profile = None, mode: Mode = None
) -> Response:
    """Judges a resource of any type."""
    return await _judged(request, _question(edition, "", "", profile, mode))


@router.post(
    "/fhir/{edition}/{resource_type}/$validate",
    summary="Check a FHIR resource of one type",
    description="The same, and a resource of another type is refused.",
    openapi_extra=RESOURCE_BODY,
    responses=_STATUSES,
)
async def validate_one_type(
    request: Request,
    edition: EditionName,
    resource_type: TypeName,
    profile: Profile = None,
    mode: Mode = None,
) -> Response:
    """Judges a resource that must be of the type in the address."""
    return await _judged(request, _question(edition, resource_type, "", profile, mode))


@router.post(
    "/fhir/{edition}/{resource_type}/{fhir_id}/$validate",
    summary="Check what a resource is to become",
    description="The same against what is here: whether the resource could be updated so, or deleted.",
    openapi_extra=RESOURCE_BODY,
    responses=_STATUSES,
)
async def validate_instance(
    request: Request,
    edition: EditionName,
    resource_type: TypeName,
    fhir_id: ResourceId,
    profile: Profile = None,
    mode: Mode = None,
) -> Response:
    """Judges a resource as a change of the one in the address."""
    return await _judged(request, _question(edition, resource_type, fhir_id, profile, mode))


def _question(edition: str, type_: str, fhir_id: str, profile: str | None, mode: str | None) -> Question:
    name = NAMES[edition]
    if type_ and type_ not in registry(name).edition.resources:
        raise answers.refusal(404, "not-supported", "http-unknown-type", "There is no such resource type.")
    return Question(name, type_, fhir_id, (profile,) if profile else (), mode or "")


async def _judged(request: Request, asked: Question) -> Response:
    requests.only_known(request, (*GENERAL, "profile", "mode"))
    wish(request, asked.edition)  # refuses who takes no JSON back; the answer is FHIR either way
    sent_fhir(request, asked.edition)
    settings: Settings = request.app.state.settings
    body = await requests.body(request, settings.max_body)
    issues = await run_in_threadpool(judge, request, body, asked)
    return answers.outcome_answer(200, issues)
