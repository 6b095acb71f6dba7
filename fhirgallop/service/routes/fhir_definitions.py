"""/fhir/{edition}/metadata, definitions, and the terminology operations on them. No patient's data."""

from __future__ import annotations

from collections.abc import Awaitable, Callable
from typing import Annotated, Any

from fastapi import APIRouter, Depends, Query, Request
from starlette.concurrency import run_in_threadpool
from starlette.responses import Response

from fhirgallop.observations.bundle import instant
from fhirgallop.service import requests
from fhirgallop.service.auth.needs import needs
from fhirgallop.service.fhir import capabilities, definitions, parameters
from fhirgallop.service.fhir.address import PUBLISHED, base, not_found
from fhirgallop.service.fhir.conditions import etag, unchanged
from fhirgallop.service.fhir.described import (
    FORM_BODY,
    RESOURCE_BODY,
    STATUSES,
    EditionName,
    ResourceId,
)
from fhirgallop.service.fhir.forms import form
from fhirgallop.service.fhir.interactions import answer
from fhirgallop.service.fhir.negotiation import GENERAL, sent_fhir, wish
from fhirgallop.service.fhir.operations import OPERATIONS, Asked, Operation
from fhirgallop.service.fhir.writing import read_resource
from fhirgallop.settings import Settings

router = APIRouter(tags=["FHIR definitions"])
_ANY_TOKEN = [Depends(needs(token=True, roles=("informatician",)))]


@router.get(
    "/fhir/{edition}/metadata",
    summary="What this address can do",
    description="A CapabilityStatement; with `mode=terminology` a TerminologyCapabilities.",
    responses=STATUSES,
    dependencies=[Depends(needs(open=True))],
)
def metadata(
    request: Request,
    edition: EditionName,
    mode: Annotated[str, Query(description="full, normative or terminology.", max_length=20)] = "full",
) -> Response:
    """Needs no token."""
    here = base(request, edition)
    wanted = wish(request, here.edition)
    requests.only_known(request, (*GENERAL, "mode"))
    closed: bool = request.app.state.gate.closed
    text = capabilities.statement(here, mode, closed=closed)
    headers = {"ETag": etag(capabilities.tag(text))}
    if unchanged(request, headers["ETag"]):
        return Response(status_code=304, headers=headers)
    return answer(wanted, text, headers=headers)


def _definitions(type_: str) -> None:
    """The routes of one type of definition."""

    @router.get(
        f"/fhir/{{edition}}/{type_}",
        summary=f"Search {type_}",
        name=f"search {type_}",
        responses=STATUSES,
        dependencies=_ANY_TOKEN,
    )
    def search(request: Request, edition: EditionName) -> Response:
        here = base(request, edition)
        pairs = request.query_params.multi_items()
        return definitions.search(request, wish(request, here.edition), here, type_, pairs)

    @router.post(
        f"/fhir/{{edition}}/{type_}/_search",
        summary=f"Search {type_}, with the parameters in the body",
        name=f"search {type_} by form",
        openapi_extra=FORM_BODY,
        responses=STATUSES,
        dependencies=_ANY_TOKEN,
    )
    async def search_by_form(request: Request, edition: EditionName) -> Response:
        here = base(request, edition)
        wanted = wish(request, here.edition)
        pairs = [*request.query_params.multi_items(), *await form(request)]
        return await run_in_threadpool(definitions.search, request, wanted, here, type_, pairs)


def _operation(operation: Operation, *, on_instance: bool) -> None:
    """The routes of one operation."""
    place = f"/fhir/{{edition}}/{operation.type}{'/{fhir_id}' if on_instance else ''}/${operation.name}"

    async def called(request: Request, edition: EditionName) -> Response:
        return await _call(request, edition, operation, "")

    async def called_on(request: Request, edition: EditionName, fhir_id: ResourceId) -> Response:
        return await _call(request, edition, operation, fhir_id)

    act: Callable[..., Awaitable[Response]] = called_on if on_instance else called
    common: dict[str, Any] = {"responses": STATUSES, "dependencies": _ANY_TOKEN}
    said = f"{operation.type}/${operation.name}"
    router.get(place, summary=said, name=f"{said} {on_instance}", **common)(act)
    router.post(
        place, summary=said, name=f"{said} {on_instance} by body", openapi_extra=RESOURCE_BODY, **common
    )(act)


async def _call(request: Request, edition: EditionName, operation: Operation, fhir_id: str) -> Response:
    here = base(request, edition)
    wanted = wish(request, here.edition)
    known = operation.known(here.edition)
    body = None
    if request.method == "POST":
        requests.only_known(request, GENERAL)
        sent_fhir(request, here.edition)
        settings: Settings = request.app.state.settings
        body = await requests.body(request, settings.max_body)

    def act() -> bytes:
        if body is None:
            given = parameters.of_address(request.query_params.multi_items(), known)
        else:
            given = parameters.of_resource(read_resource(body), known)
        library = definitions.library(request)
        instance = library.read(here.edition, operation.type, fhir_id) if fhir_id else None
        if fhir_id and instance is None:
            raise not_found()
        at = instant(request.app.state.clock())
        return operation.act(Asked(library, here.edition, given, instance, at))

    return answer(wanted, await run_in_threadpool(act))


def _reading(type_: str) -> None:
    @router.get(
        f"/fhir/{{edition}}/{type_}/{{fhir_id}}",
        summary=f"Read a {type_}",
        name=f"read {type_}",
        responses=STATUSES,
        dependencies=_ANY_TOKEN,
    )
    def read(request: Request, edition: EditionName, fhir_id: ResourceId) -> Response:
        here = base(request, edition)
        wanted = wish(request, here.edition)
        requests.only_known(request, GENERAL)
        return definitions.read(request, wanted, here, type_, fhir_id)


# operations before reads: the name of an operation stands where an id does
for _one in OPERATIONS:
    _operation(_one, on_instance=False)
    if _one.on_instance:
        _operation(_one, on_instance=True)
for _type in PUBLISHED:
    _definitions(_type)
    _reading(_type)
