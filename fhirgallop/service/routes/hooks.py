"""CDS Hooks: discovery, the services, feedback, and the pages that cards link to.

Source: CDS Hooks 2.0.1.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import replace
from typing import Annotated, Any, Final

from fastapi import APIRouter, Depends, Path, Request
from starlette.concurrency import run_in_threadpool
from starlette.responses import Response

from fhirgallop import assets
from fhirgallop.cards.discovery import EXAM_DRAFT, Service, discovery, find
from fhirgallop.cards.feedback import read_feedback
from fhirgallop.cards.hooks import Call, read_call
from fhirgallop.cards.signoff import rule_text
from fhirgallop.codes import fhirjson
from fhirgallop.intake.detect import open_records
from fhirgallop.intake.limits import DEFAULT
from fhirgallop.intake.record import LocalRecord
from fhirgallop.outcome import Issue, has_errors
from fhirgallop.pipeline import process
from fhirgallop.service import answers, audit, requests
from fhirgallop.service.auth.needs import needs
from fhirgallop.service.examinations import BusyError
from fhirgallop.service.fetching import Fetcher
from fhirgallop.service.hook_desk import HookDesk, patient_of
from fhirgallop.service.limits import in_turn
from fhirgallop.settings import Settings

router = APIRouter(tags=["CDS Hooks"])

MARKDOWN: Final = "text/markdown"
_BODY: Final[dict[str, Any]] = {
    "requestBody": {"required": True, "content": {answers.PLAIN_JSON: {"schema": {"type": "object"}}}}
}
_STATUSES: Final[dict[int | str, dict[str, Any]]] = {
    400: answers.told("The body is malformed, or contradicts itself."),
    404: answers.told("There is no service of that name."),
    415: answers.told("The body is not JSON by its Content-Type."),
    **answers.REFUSALS,
}
_CALL_STATUSES: Final[dict[int | str, dict[str, Any]]] = {
    200: {"description": "`{cards}`; the list may be empty, and an empty one is no reassurance."},
    412: answers.told("Data that are needed were not sent."),
    422: answers.told("The draft's record cannot be coded by its map."),
    **_STATUSES,
}
_BUSY: Final = Issue(
    "error", "conflict", "hook-busy", "This patient's cards are being worked on by other requests; ask again."
)
ServiceId = Annotated[str, Path(max_length=64, description="Name of the service, as discovery lists it.")]
RuleId = Annotated[str, Path(max_length=200, description="Name of the rule, as a card's link has it.")]


@router.get(
    "/cds-services",
    summary="List the CDS Hooks services",
    dependencies=[Depends(needs(cds=True))],
    responses=answers.REFUSALS,
)
def list_services() -> Response:
    """Hooks, prefetch templates and usage requirements."""
    return answers.json_answer(discovery())


@router.post(
    "/cds-services/{service_id}",
    summary="Call a CDS Hooks service",
    description=(
        "The body is a CDS Hooks 2.0.1 request. What is not in the prefetch is read from a fhirServer that "
        "is listed here; data that are needed and cannot be had are answered with 412."
    ),
    openapi_extra=_BODY,
    dependencies=[Depends(needs(cds=True))],
    responses=_CALL_STATUSES,
)
async def call_service(request: Request, service_id: ServiceId) -> Response:
    """Holds today's examination against what was sent, and what could be read of the rest."""
    service = _service(service_id)
    body = await _json_body(request)
    call, draft = await in_turn(request, "cards", _prepared, request, service, body)
    if not call.by_clinician:
        return answers.json_answer({"cards": []})
    fetcher: Fetcher | None = request.app.state.fetcher
    if fetcher and (call.prefetch.absent or call.prefetch.paged):
        # waits for another server: out of turn
        call = await run_in_threadpool(fetcher.complete, call, service, request.state.caller.name)
    return await in_turn(request, "cards", _cards, request, service, call, draft)


@router.post(
    "/cds-services/{service_id}/feedback",
    summary="Report what became of cards",
    description="The body is a CDS Hooks 2.0.1 feedback request. The same report sent twice is kept once.",
    openapi_extra=_BODY,
    dependencies=[Depends(needs(cds=True))],
    responses={200: {"description": "Kept."}, **_STATUSES},
)
async def take_feedback(request: Request, service_id: ServiceId) -> Response:
    """Keeps feedback, all of it or none."""
    service = _service(service_id)
    body = await _json_body(request)
    return await in_turn(request, "cards", _feedback, request, service, body)


@router.get(
    "/cds-feedback",
    summary="Feedback counted by rule",
    dependencies=[Depends(needs(roles=("informatician",)))],
    responses=answers.REFUSALS,
)
def feedback_counts(request: Request) -> Response:
    """How often the cards of each rule were accepted and overridden; no patient's data."""
    requests.only_known(request, ())
    return answers.json_answer(_desk(request).counts())


@router.get(
    "/rules/{rule_id}",
    summary="One rule, with its sources",
    dependencies=[Depends(needs(open=True))],
    responses=answers.REFUSALS,
)
def one_rule(request: Request, rule_id: RuleId) -> Response:
    """The rule as Markdown: what it says, why, from which source and how sure."""
    requests.only_known(request, ())
    book = _desk(request).rules
    if rule_id not in book.rules:
        raise answers.refusal(404, "not-found", "http-unknown-rule", "There is no rule of that name.")
    return Response(rule_text(book.rules[rule_id], book), media_type=MARKDOWN)


@router.get(
    f"/hooks/{EXAM_DRAFT}",
    summary="Definition of the draft hook",
    dependencies=[Depends(needs(open=True))],
    responses=answers.REFUSALS,
)
def draft_hook(request: Request) -> Response:
    """The definition page of our own hook, as Markdown."""
    requests.only_known(request, ())
    path = assets.path("profiles", "fhirgallop", "hooks", f"{EXAM_DRAFT}.md")
    return Response(path.read_bytes(), media_type=MARKDOWN)


def _desk(request: Request) -> HookDesk:
    desk: HookDesk = request.app.state.hooks
    return desk


def _service(id_: str) -> Service:
    service = find(id_)
    if service is None:
        text = "There is no service of that name; GET /cds-services lists them."
        raise answers.refusal(404, "not-found", "hook-unknown-service", text)
    return service


async def _json_body(request: Request) -> bytes:
    requests.only_known(request, ())
    given = request.headers.get("content-type", "").partition(";")[0].strip().lower()
    if given != answers.PLAIN_JSON:
        text = f"This Content-Type is not read here; send {answers.PLAIN_JSON}."
        raise answers.refusal(415, "not-supported", "http-content-type", text)
    settings: Settings = request.app.state.settings
    return await requests.body(request, settings.max_body)


def _value(body: bytes) -> Any:
    value, issues = fhirjson.read(body)
    if has_errors(issues):
        raise answers.RefusalError(400, issues)
    return value


@contextmanager
def _busy_told() -> Iterator[None]:
    try:
        yield
    except BusyError:
        raise answers.RefusalError(503, [_BUSY], {"Retry-After": "1"}) from None


def _prepared(request: Request, service: Service, body: bytes) -> tuple[Call, Mapping[str, Any] | None]:
    """The call as it was sent, and its draft examination, where it has one and somebody to see cards."""
    call, issues = read_call(_value(body), service)
    if call is None:
        raise _refused(issues)
    audit.about(
        request,
        action="E",
        interaction="operation",
        patients=[patient_of(call)],
        entities=[f"CDS Hooks {service.id}"],
    )
    return call, _draft(request, call) if call.by_clinician else None


def _cards(request: Request, service: Service, call: Call, draft: Mapping[str, Any] | None) -> Response:
    if has_errors(issues := call.faults(service)):
        raise _refused(issues)
    with _busy_told():
        client = request.state.caller.name
        answer, issues = _desk(request).answer(service, call, draft, client, audit.kept(request))
    if has_errors(issues):
        raise _refused(issues)
    return answers.json_answer(answer)


def _refused(issues: list[Issue]) -> answers.RefusalError:
    """412 where only data are missing, 400 for everything else."""
    only_missing = all(issue.code == "incomplete" for issue in issues if issue.is_error)
    return answers.RefusalError(412 if only_missing else 400, issues)


def _draft(request: Request, call: Call) -> Mapping[str, Any] | None:
    """The draft examination as a Bundle, coded first where it came in the clinic's own words."""
    if call.record is None:
        return call.draft
    template = request.app.state.shelf.get(call.map_name)
    if template is None:
        text = "There is no template map of that name; GET /maps lists them."
        raise answers.RefusalError(
            400, [Issue("error", "not-found", "http-unknown-map", text, field="context.map")]
        )
    settings: Settings = request.app.state.settings
    limits = replace(DEFAULT, depth=settings.max_depth)
    reads = list(open_records(fhirjson.write(call.record), content_type=answers.PLAIN_JSON, limits=limits))
    record = reads[0] if len(reads) == 1 else None
    if not isinstance(record, LocalRecord):
        raise answers.RefusalError(422, [issue for read in reads for issue in read.issues])
    result = process(record, template, recorded=request.app.state.clock(), snomed=False)
    if result.bundle is None:
        raise answers.RefusalError(422, result.issues)
    return result.bundle


def _feedback(request: Request, service: Service, body: bytes) -> Response:
    reports, issues = read_feedback(_value(body), service.id)
    if has_errors(issues):
        raise answers.RefusalError(400, issues)
    with _busy_told():
        patients = _desk(request).take(service, reports)
    audit.about(request, action="C", interaction="create", patients=patients)
    return Response(status_code=200)
