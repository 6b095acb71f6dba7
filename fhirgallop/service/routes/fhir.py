"""/fhir/{edition}/{type}: read, versions, search, create and update of what is kept.

Source: FHIR R4 http.html and search.html. HEAD, `_summary`, `_elements`, delete and patch are not offered:
what was wrong is entered in error, and stays in the history.
"""

from __future__ import annotations

from typing import Annotated

from fastapi import APIRouter, Depends, Path, Request
from starlette.concurrency import run_in_threadpool
from starlette.responses import Response

from fhirgallop.service import requests
from fhirgallop.service.auth.needs import needs
from fhirgallop.service.fhir import changes, interactions
from fhirgallop.service.fhir.address import KEPT, Base, EditionPath, base, known_type
from fhirgallop.service.fhir.bundles import MOST_ENTRIES, answered
from fhirgallop.service.fhir.changes import Sent
from fhirgallop.service.fhir.described import (
    CHANGED,
    FORM_BODY,
    RESOURCE_BODY,
    STATUSES,
    EditionName,
    ResourceId,
)
from fhirgallop.service.fhir.forms import form
from fhirgallop.service.fhir.negotiation import GENERAL, Wish, sent_fhir, wish
from fhirgallop.service.fhir.writing import read_resource
from fhirgallop.settings import Settings

router = APIRouter(tags=["FHIR"])

TypeName = Annotated[str, Path(max_length=64, description=f"One of {', '.join(KEPT)}.")]


@router.get(
    "/fhir/{edition}/{resource_type}",
    summary="Search resources",
    description="Search parameters as the CapabilityStatement lists them; pages follow the link `next`.",
    responses=STATUSES,
    dependencies=[Depends(needs(does="s"))],
)
def search(request: Request, edition: EditionName, resource_type: TypeName) -> Response:
    """One page of what fits."""
    here = base(request, edition)
    wanted = wish(request, here.edition)
    known_type(here.edition, resource_type, among=KEPT)
    return interactions.search(request, wanted, here, resource_type, request.query_params.multi_items())


@router.post(
    "/fhir/{edition}/{resource_type}/_search",
    summary="Search resources, with the parameters in the body",
    openapi_extra=FORM_BODY,
    responses=STATUSES,
    dependencies=[Depends(needs(does="s"))],
)
async def search_by_form(request: Request, edition: EditionName, resource_type: TypeName) -> Response:
    """The same search; parameters of the address count too."""
    here = base(request, edition)
    wanted = wish(request, here.edition)
    known_type(here.edition, resource_type, among=KEPT)
    parameters = [*request.query_params.multi_items(), *await form(request)]
    return await run_in_threadpool(interactions.search, request, wanted, here, resource_type, parameters)


@router.get(
    "/fhir/{edition}/{resource_type}/{fhir_id}",
    summary="Read a resource",
    responses=STATUSES,
    dependencies=[Depends(needs(does="r"))],
)
def read(request: Request, edition: EditionName, resource_type: TypeName, fhir_id: ResourceId) -> Response:
    """The current version, with its ETag."""
    here = base(request, edition)
    wanted = wish(request, here.edition)
    requests.only_known(request, GENERAL)
    known_type(here.edition, resource_type, among=KEPT)
    return interactions.read(request, wanted, here, resource_type, fhir_id)


@router.get(
    "/fhir/{edition}/{resource_type}/{fhir_id}/_history",
    summary="Versions of a resource",
    description="Newest first; `_count` and `_since` are served.",
    responses=STATUSES,
    dependencies=[Depends(needs(does="r"))],
)
def history(request: Request, edition: EditionName, resource_type: TypeName, fhir_id: ResourceId) -> Response:
    """A Bundle of versions."""
    here = base(request, edition)
    wanted = wish(request, here.edition)
    requests.only_known(request, interactions.HISTORY_PARAMETERS)
    known_type(here.edition, resource_type, among=KEPT)
    return interactions.history(request, wanted, here, resource_type, fhir_id)


@router.get(
    "/fhir/{edition}/{resource_type}/{fhir_id}/_history/{version_id}",
    summary="Read one version of a resource",
    responses=STATUSES,
    dependencies=[Depends(needs(does="r"))],
)
def vread(
    request: Request,
    edition: EditionName,
    resource_type: TypeName,
    fhir_id: ResourceId,
    version_id: Annotated[str, Path(max_length=64, description="versionId.")],
) -> Response:
    """The version as it was."""
    here = base(request, edition)
    wanted = wish(request, here.edition)
    requests.only_known(request, GENERAL)
    known_type(here.edition, resource_type, among=KEPT)
    return interactions.vread(request, wanted, here, resource_type, fhir_id, version_id)


@router.post(
    "/fhir/{edition}/{resource_type}",
    summary="Create a resource",
    description="The id is ours. With If-None-Exist nothing is created where one fits already.",
    openapi_extra=RESOURCE_BODY,
    responses=CHANGED,
    dependencies=[Depends(needs(does="c"))],
)
async def create(request: Request, edition: EditionName, resource_type: TypeName) -> Response:
    """Judges the resource and keeps it."""
    wanted = wish(request, base(request, edition).edition)
    requests.only_known(request, GENERAL)
    sent = await _sent(request, edition, resource_type)
    condition = request.headers.get("if-none-exist")
    return await run_in_threadpool(changes.create, request, wanted, sent, condition)


@router.put(
    "/fhir/{edition}/{resource_type}/{fhir_id}",
    summary="Update a resource",
    description="The next version of what is there; with If-Match only of the version named.",
    openapi_extra=RESOURCE_BODY,
    responses=CHANGED,
    dependencies=[Depends(needs(does="u"))],
)
async def update(
    request: Request, edition: EditionName, resource_type: TypeName, fhir_id: ResourceId
) -> Response:
    """Judges the resource and keeps it as the next version."""
    wanted = wish(request, base(request, edition).edition)
    requests.only_known(request, GENERAL)
    sent = await _sent(request, edition, resource_type)
    return await run_in_threadpool(changes.update, request, wanted, sent, fhir_id)


@router.put(
    "/fhir/{edition}/{resource_type}",
    summary="Update the one resource that fits",
    description="Search parameters name the resource; where none fits it is created, where several do: 412.",
    openapi_extra=RESOURCE_BODY,
    responses=CHANGED,
    dependencies=[Depends(needs(does="u"))],
)
async def update_found(request: Request, edition: EditionName, resource_type: TypeName) -> Response:
    """Judges the resource and keeps it, as the next version of the one that fits, or as a new one."""
    wanted = wish(request, base(request, edition).edition)
    sent = await _sent(request, edition, resource_type)
    return await run_in_threadpool(
        changes.update_found, request, wanted, sent, request.query_params.multi_items()
    )


@router.post(
    "/fhir/{edition}",
    summary="Transaction or batch",
    description=f"A Bundle of creates, updates, reads and searches; at most {MOST_ENTRIES} entries.",
    openapi_extra=RESOURCE_BODY,
    responses=CHANGED,
    dependencies=[Depends(needs(token=True))],  # each entry needs its own scopes
)
async def bundle(request: Request, edition: EditionName) -> Response:
    """All entries or none (transaction), or each for itself (batch)."""
    here = base(request, edition)
    wanted = wish(request, here.edition)
    requests.only_known(request, GENERAL)
    sent_fhir(request, here.edition)
    settings: Settings = request.app.state.settings
    text = await requests.body(request, settings.max_body)
    return await run_in_threadpool(_bundle, request, wanted, here, text)


def _bundle(request: Request, wanted: Wish, here: Base, text: bytes) -> Response:
    return answered(request, wanted, here, read_resource(text))


async def _sent(request: Request, edition: EditionPath, type_: str) -> Sent:
    here = base(request, edition)
    known_type(here.edition, type_, among=KEPT)
    sent_fhir(request, here.edition)
    settings: Settings = request.app.state.settings
    text = await requests.body(request, settings.max_body)
    return Sent(here, type_, await run_in_threadpool(read_resource, text))
