"""/batches: how far examinations that were sent with `Prefer: respond-async` are, and what became of them."""

from __future__ import annotations

from typing import Annotated, Any, Final

from fastapi import APIRouter, Depends, Path, Query, Request
from starlette.concurrency import run_in_threadpool
from starlette.responses import Response, StreamingResponse

from fhirgallop.service import answers, audit, requests
from fhirgallop.service.auth.needs import needs
from fhirgallop.service.batch_desk import PAGE, BatchDesk
from fhirgallop.service.routes.exams import WRITTEN

router = APIRouter(tags=["examinations"])

_NDJSON: Final = "application/x-ndjson"
_MINE: Final = [Depends(needs(does="cu", to=WRITTEN))]
_STATUSES: Final[dict[int | str, dict[str, Any]]] = {
    202: answers.told("Not at its end, or given up."),
    404: answers.told("This caller has no such batch."),
    **answers.REFUSALS,
}
_Id = Annotated[str, Path(description="From Content-Location.", max_length=36)]


@router.get(
    "/batches/{id}",
    summary="How far is a batch?",
    description=(
        "202 with `X-Progress` and `Retry-After` while it is coded; at its end 200 with `{total, coded, "
        "refused, unreadable, not-stored, results}`, where `results` lists the pages of NDJSON that hold a "
        "result a record, in order."
    ),
    # counts and addresses alone: no patient's data
    dependencies=[Depends(needs(token=True))],
    responses={200: {"description": "Done.", "content": {answers.PLAIN_JSON: {}}}, **_STATUSES},
)
async def status(request: Request, id: _Id) -> Response:  # noqa: A002 - the name in the address
    """Progress, or the counts and the addresses of the results."""
    requests.only_known(request, ())
    desk: BatchDesk = request.app.state.batches
    reply = await run_in_threadpool(desk.status, id, request.state.caller, requests.base(request))
    return reply.response()


@router.get(
    "/batches/{id}/results",
    summary="Results of a batch",
    description=(
        f"At most {PAGE} results from the record `first` (from 0) on, as far as they are there: one JSON "
        "object a line, as in the answer to a list. `bundle` is null where it was deleted since."
    ),
    dependencies=_MINE,
    responses={200: {"description": "Results.", "content": {_NDJSON: {}}}, **_STATUSES},
)
async def results(
    request: Request,
    id: _Id,  # noqa: A002 - the name in the address
    first: Annotated[int, Query(ge=0, le=10_000_000, description="Place of the first result.")] = 0,
) -> Response:
    """One page, sent as it is read from the database."""
    requests.only_known(request, ("first",))
    desk: BatchDesk = request.app.state.batches
    lines, patients = await run_in_threadpool(desk.results, id, request.state.caller, first)
    audit.about(request, action="R", interaction="read", patients=patients, entities=[f"urn:uuid:{id}"])
    return StreamingResponse(lines, media_type=_NDJSON)


@router.delete(
    "/batches/{id}",
    summary="Give a batch up",
    description="What was coded of it stays; body and results are deleted. Then it is unknown (404).",
    dependencies=_MINE,
    responses=_STATUSES,
)
async def cancel(request: Request, id: _Id) -> Response:  # noqa: A002 - the name in the address
    """Ends it, and says how far it was."""
    requests.only_known(request, ())
    audit.about(request, action="D", interaction="delete", entities=[f"urn:uuid:{id}"])
    desk: BatchDesk = request.app.state.batches
    return (await run_in_threadpool(desk.cancel, id, request.state.caller)).response()
