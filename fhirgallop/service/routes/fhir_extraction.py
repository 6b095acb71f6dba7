"""POST /fhir/{edition}/QuestionnaireResponse/$extract. Nothing is stored, so that no response has an id."""

from __future__ import annotations

from fastapi import APIRouter, Depends, Request
from starlette.concurrency import run_in_threadpool
from starlette.responses import Response

from fhirgallop.service import requests
from fhirgallop.service.auth.needs import needs
from fhirgallop.service.fhir import parameters
from fhirgallop.service.fhir.address import base
from fhirgallop.service.fhir.described import RESOURCE_BODY, STATUSES, EditionName
from fhirgallop.service.fhir.extraction import KNOWN, extracted
from fhirgallop.service.fhir.interactions import answer
from fhirgallop.service.fhir.negotiation import GENERAL, sent_fhir, wish
from fhirgallop.service.fhir.writing import read_resource
from fhirgallop.settings import Settings

router = APIRouter(tags=["FHIR"])


@router.post(
    "/fhir/{edition}/QuestionnaireResponse/$extract",
    summary="Make Observations of a form's answers",
    description=(
        "The body is Parameters with `questionnaire-response`, `questionnaire`; the answer Parameters with "
        "`return` (a transaction Bundle) and `issues`. Or send the response alone, with its form contained."
    ),
    openapi_extra=RESOURCE_BODY,
    responses=STATUSES,
    dependencies=[Depends(needs(token=True))],
)
async def extract(request: Request, edition: EditionName) -> Response:
    """Observation-based extraction (SDC)."""
    here = base(request, edition)
    wanted = wish(request, here.edition)
    requests.only_known(request, GENERAL)
    sent_fhir(request, here.edition)
    settings: Settings = request.app.state.settings
    body = await requests.body(request, settings.max_body)

    def act() -> bytes:
        resource = read_resource(body)
        if resource.get("resourceType") == "QuestionnaireResponse":
            given = {"questionnaire-response": [resource]}
        else:
            given = parameters.of_resource(resource, KNOWN)
        return extracted(given, here.edition, request.app.state.clock())

    return answer(wanted, await run_in_threadpool(act))
